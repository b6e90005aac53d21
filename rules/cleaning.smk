# From what was recorded to windows that can be trusted.


rule filter:
    input:
        signal=result("intake_signal"),
    output:
        **made("filter", "signal", "gains"),
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
        settings=settings_part("sensors.reference", "seed"),
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
        **made("components", "ica", "verdicts"),
    log:
        log_of("components", "{recording}"),
    benchmark:
        benchmark_of("components", "{recording}")
    threads: 1
    resources:
        mem_mb=1500,
        runtime=60,
    params:
        settings=settings_part(
            "components", "sensors.reference", "filter.lowpass_hz", "terms", "seed"
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
        components=result("components_verdicts"),
        trials=result("intake_trials"),
    output:
        **made("windows", "signal", "verdicts", "gains"),
    log:
        log_of("windows", "{recording}"),
    benchmark:
        benchmark_of("windows", "{recording}")
    threads: 1
    resources:
        mem_mb=1500,
        runtime=30,
    params:
        settings=settings_part(
            "windows",
            "filter.lowpass_hz",
            "terms",
            "conditions.*.flickering",
        ),
        code=code("windows"),
    message:
        "windows: cutting {wildcards.recording}"
    script:
        "../scripts/windows.py"
