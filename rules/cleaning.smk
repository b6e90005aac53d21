# From what was recorded to windows that can be trusted.


rule filter:
    input:
        signal=result("intake_signal"),
        recording=result("intake_recording"),
    output:
        **made("filter", "signal", "designs", "gains"),
    log:
        log_of("filter", "{recording}"),
    benchmark:
        benchmark_of("filter", "{recording}")
    threads: 1
    resources:
        mem_mb=1500,
        runtime=30,
    params:
        settings=settings_part("filter", "terms"),
        code=code("filter"),
    message:
        "filter: {wildcards.recording}"
    script:
        "../scripts/filter.py"


rule sensors:
    input:
        signal=result("filter_signal"),
        recorded=result("intake_signal"),
    output:
        **made("sensors", "signal", "verdicts"),
    log:
        log_of("sensors", "{recording}"),
    benchmark:
        benchmark_of("sensors", "{recording}")
    threads: 1
    resources:
        mem_mb=1500,
        runtime=30,
    params:
        settings=lambda wildcards: settings_part(
            "sensors.reference", "seed", **decided("channel", wildcards.recording)
        ),
        code=code("sensors"),
    message:
        "sensors: judging the channels of {wildcards.recording}"
    script:
        "../scripts/sensors.py"


rule components:
    input:
        signal=result("sensors_signal"),
        sensors=result("sensors_verdicts"),
    output:
        **made("components", "ica", "evidence", "sheet"),
    log:
        log_of("components", "{recording}"),
    benchmark:
        benchmark_of("components", "{recording}")
    threads: 1
    resources:
        mem_mb=1500,
        runtime=60,
    params:
        settings=lambda wildcards: settings_part(
            "components.method",
            "sensors.reference",
            "filter.lowpass_hz",
            "terms",
            "seed",
            recording=RECORDING[wildcards.recording].stem,
        ),
        code=code("components"),
    message:
        "components: separating sources of {wildcards.recording}"
    script:
        "../scripts/components.py"


rule windows:
    input:
        signal=result("sensors_signal"),
        ica=result("components_ica"),
        trials=result("intake_trials"),
        gains=result("filter_gains"),
    output:
        **made("windows", "signal", "components", "verdicts", "gains"),
    log:
        log_of("windows", "{recording}"),
    benchmark:
        benchmark_of("windows", "{recording}")
    threads: 1
    resources:
        mem_mb=1500,
        runtime=30,
    params:
        settings=lambda wildcards: settings_part(
            "windows",
            "components.remove",
            "components.max_tag_share",
            "regions",
            "relation.response_region",
            "filter.lowpass_hz",
            "terms",
            "conditions.*.flickering",
            **decided("component", wildcards.recording),
        ),
        code=code("windows"),
    message:
        "windows: cutting {wildcards.recording}"
    script:
        "../scripts/windows.py"
