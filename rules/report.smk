# What people read, and the list of everything that was made.


rule report:
    input:
        plan=result("plan_terms"),
        plan_page=result("plan_page"),
        participants=result("study_participants"),
        flicker=result("study_flicker"),
        responses=result("study_responses"),
        alpha=result("study_alpha"),
        relation=result("study_relation"),
        attention=result("study_attention"),
        comparisons=result("study_comparisons"),
        group=result("study_group"),
        relation_windows=of_all_participants("relation_windows"),
        coefficients=of_all_participants("spectra_coefficients"),
        psd=of_all_participants("spectra_psd"),
        channels=of_all_recordings("intake_channels"),
        designs=of_all_recordings("filter_designs"),
        gains=of_all_recordings("filter_gains"),
        sensors=of_all_recordings("sensors_verdicts"),
        components=of_all_recordings("windows_components"),
        windows=of_all_recordings("windows_verdicts"),
        cleaning=of_all_recordings("windows_gains"),
        signal=of_all_recordings("windows_signal")[0],
    output:
        **made(
            "report",
            "page",
            "quality",
            "bins",
            "topographies",
            "responses",
            "alpha",
            "relation",
        ),
    log:
        log_of("report"),
    benchmark:
        benchmark_of("report")
    threads: 1
    resources:
        mem_mb=2000,
        runtime=30,
    params:
        settings=settings_part(
            *type(STUDY).model_fields,
            "terms",
            "least_rate_hz",
            decisions=[decisions.row(decision) for decision in DECISIONS],
            left_out=left_out_by_participant(),
        ),
        code=code("report"),
    message:
        "report: writing the pages"
    script:
        "../scripts/report.py"


rule manifest:
    input:
        files=everything(),
    output:
        **made("manifest", "files"),
    log:
        log_of("manifest"),
    params:
        settings=settings_part("dataset.results"),
        code=code("manifest"),
    message:
        "manifest: listing all that was made"
    script:
        "../scripts/manifest.py"
