# From a participant's windows to spectra, responses, alpha and how the two relate.


rule flicker:
    input:
        signal=result("windows_signal"),
        verdicts=result("windows_verdicts"),
    output:
        **made("flicker", "frequencies"),
    log:
        log_of("flicker", "{recording}"),
    benchmark:
        benchmark_of("flicker", "{recording}")
    threads: 1
    resources:
        mem_mb=1000,
        runtime=20,
    params:
        settings=lambda wildcards: settings_part(
            "flicker",
            "windows.length_s",
            "filter.line_hz",
            "terms",
            "conditions.*.flickering",
            "regions",
            "relation.response_region",
            recording=wildcards.recording,
        ),
        code=code("flicker"),
    message:
        "flicker: looking for the tags of {wildcards.recording}"
    script:
        "../scripts/flicker.py"


rule spectra:
    input:
        signals=of_participant("windows_signal"),
        verdicts=of_participant("windows_verdicts"),
        flicker=of_participant("flicker_frequencies"),
    output:
        **made("spectra", "coefficients", "psd"),
    log:
        log_of("spectra", "{participant}"),
    benchmark:
        benchmark_of("spectra", "{participant}")
    threads: 1
    resources:
        mem_mb=2000,
        runtime=30,
    params:
        settings=lambda wildcards: settings_part(
            "filter.lowpass_hz",
            "terms",
            "conditions.*.flickering",
            "regions",
            "response.neighbours",
            "response.skip",
            "alpha.segment_s",
            "alpha.grid_hz",
            recordings=recordings_of(wildcards.participant),
        ),
        code=code("spectra"),
    message:
        "spectra: {wildcards.participant}"
    script:
        "../scripts/spectra.py"


rule response:
    input:
        coefficients=result("spectra_coefficients"),
    output:
        **made("response", "measures", "windows"),
    log:
        log_of("response", "{participant}"),
    benchmark:
        benchmark_of("response", "{participant}")
    threads: 1
    resources:
        mem_mb=1000,
        runtime=10,
    params:
        settings=lambda wildcards: settings_part(
            "response.level",
            "response.correction",
            "filter.line_hz",
            "terms",
            "conditions.*.flickering",
            "conditions.*.phase_locked",
            participant=wildcards.participant,
        ),
        code=code("response"),
    message:
        "response: {wildcards.participant}"
    script:
        "../scripts/response.py"


rule alpha:
    input:
        psd=result("spectra_psd"),
    output:
        **made("alpha", "measures", "windows"),
    log:
        log_of("alpha", "{participant}"),
    benchmark:
        benchmark_of("alpha", "{participant}")
    threads: 1
    resources:
        mem_mb=1000,
        runtime=10,
    params:
        settings=lambda wildcards: settings_part(
            "alpha",
            "filter.line_hz",
            "terms",
            "conditions.*.flickering",
            "regions",
            participant=wildcards.participant,
        ),
        code=code("alpha"),
    message:
        "alpha: {wildcards.participant}"
    script:
        "../scripts/alpha.py"


rule relation:
    input:
        alpha=result("alpha_windows"),
        response=result("response_windows"),
    output:
        **made("relation", "measures", "windows"),
    log:
        log_of("relation", "{participant}"),
    benchmark:
        benchmark_of("relation", "{participant}")
    threads: 1
    resources:
        mem_mb=1000,
        runtime=10,
    params:
        settings=lambda wildcards: settings_part(
            "relation",
            "alpha.region",
            "conditions.*.attended",
            "seed",
            participant=wildcards.participant,
        ),
        code=code("relation"),
    message:
        "relation: alpha and response of {wildcards.participant}"
    script:
        "../scripts/relation.py"


rule attention:
    input:
        signals=of_participant("windows_signal"),
        verdicts=of_participant("windows_verdicts"),
        flicker=of_participant("flicker_frequencies"),
    output:
        **made("attention", "measures"),
    log:
        log_of("attention", "{participant}"),
    benchmark:
        benchmark_of("attention", "{participant}")
    threads: 1
    resources:
        mem_mb=2000,
        runtime=30,
    params:
        settings=lambda wildcards: settings_part(
            "filter.lowpass_hz",
            "terms",
            "conditions.*.flickering",
            "conditions.*.attended",
            "seed",
            participant=wildcards.participant,
            recordings=recordings_of(wildcards.participant),
        ),
        code=code("attention"),
    message:
        "attention: telling which tag {wildcards.participant} attended"
    script:
        "../scripts/attention.py"
