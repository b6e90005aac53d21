# From everybody's measures to the study's tables.


rule study:
    input:
        people=participants_table(),
        sensors=of_all_recordings("sensors_verdicts"),
        components=of_all_recordings("windows_components"),
        windows=of_all_recordings("windows_verdicts"),
        flicker=of_all_recordings("flicker_frequencies"),
        responses=of_all_participants("response_measures"),
        alphas=of_all_participants("alpha_measures"),
        relations=of_all_participants("relation_measures"),
        relation_windows=of_all_participants("relation_windows"),
        attentions=of_all_participants("attention_measures"),
    output:
        **made(
            "study",
            "participants",
            "flicker",
            "responses",
            "alpha",
            "relation",
            "attention",
            "comparisons",
            "group",
        ),
    log:
        log_of("study"),
    benchmark:
        benchmark_of("study")
    threads: 1
    resources:
        mem_mb=2000,
        runtime=30,
    params:
        settings=settings_part(
            "sensors.max_bad_share",
            "trust",
            "conditions.*.flickering",
            "planned",
            "seed",
            "dataset.participants",
            folders=layout.participant_folders(STUDY.dataset.folder),
            left_out=left_out_by_participant(),
            participants={who: recordings_of(who) for who in PARTICIPANTS},
            recordings=[recording.name for recording in RECORDINGS],
            trusted=decisions.trusted(DECISIONS, RECORDINGS),
        ),
        code=code("study"),
    message:
        "study: bringing everybody together"
    script:
        "../scripts/study.py"


rule draft:
    input:
        participants=result("study_participants"),
        sensors=of_all_recordings("sensors_verdicts"),
        components=of_all_recordings("windows_components"),
    output:
        **made("draft", "decisions"),
    log:
        log_of("draft"),
    localrule: True
    params:
        settings=settings_part(
            decisions=[decisions.row(decision) for decision in DECISIONS],
            recordings=[recording.stem for recording in RECORDINGS],
        ),
        code=code("draft"),
    message:
        "draft: what could be decided, in {output.decisions}"
    script:
        "../scripts/draft.py"


rule describe:
    output:
        description=result("describe_description"),
        readme=result("describe_readme"),
        ignore=result("describe_ignore"),
    log:
        log_of("describe"),
    params:
        settings=settings_part("study", "dataset.folder"),
        code=code("describe"),
    message:
        "describe: naming the results as a BIDS derivative"
    script:
        "../scripts/describe.py"
