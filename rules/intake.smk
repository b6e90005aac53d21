# From the dataset's own formats to one signal a recording, with trials in the study's terms.


rule intake:
    input:
        files=lambda wildcards: list(RECORDING[wildcards.recording].files),
    output:
        **made("intake", "signal", "trials", "channels", "recording"),
    log:
        log_of("intake", "{recording}"),
    benchmark:
        benchmark_of("intake", "{recording}")
    threads: 1
    resources:
        mem_mb=1500,
        runtime=30,
    params:
        settings=lambda wildcards: settings_part(
            "least_rate_hz",
            "flicker.photodiode",
            "filter.line_hz",
            "conditions.*.events",
            "conditions.*.duration_s",
            folder=STUDY.dataset.folder,
            recording=wildcards.recording,
            extension=RECORDING[wildcards.recording].extension,
        ),
        code=code("intake"),
    message:
        "intake: reading {wildcards.recording}"
    script:
        "../scripts/intake.py"
