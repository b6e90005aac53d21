# What becomes of every tag as the settings stand, told before any data is touched.

from onbin import plan

# The files that tell how recordings were made and shown, and of which channels.
METADATA = sorted(
    {
        path
        for recording in RECORDINGS
        for path in recording.files
        if path.endswith(("eeg.json", "events.json", "channels.tsv"))
    }
)


rule plan:
    input:
        metadata=METADATA,
    output:
        **made("plan", "terms", "page"),
    log:
        log_of("plan"),
    benchmark:
        benchmark_of("plan")
    priority: 1  # what cannot work is told first
    threads: 1
    resources:
        mem_mb=500,
        runtime=10,
    params:
        settings=settings_part(
            *plan.SETTINGS,
            "regions",
            "sensors.reference",
            "dataset.folder",
            "dataset.tasks",
            "dataset.participants",
            recordings=list(RECORDING),
        ),
        code=code("plan"),
    message:
        "plan: placing every tag and what lies beside it"
    script:
        "../scripts/plan.py"


rule audit:
    input:
        result("plan_page"),
    log:
        log_of("audit"),
    localrule: True
    message:
        "audit: the flicker plan"
    shell:
        "tee -- {log:q} < {input:q}"
