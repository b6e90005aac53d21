"""What is said at the end: who is in the study, who is not and why, where to look."""

import pytest
from onbin import layout, records, summary, tables

COLUMNS = ["participant", "in_study", "reason", "recordings", "windows_kept", "left_out"]


def study(results, *rows):
    path = layout.result(results, "study_participants")
    (results / "study").mkdir()
    tables.write_table(path, [dict(zip(COLUMNS, row, strict=True)) for row in rows], COLUMNS)


def test_people_and_report(tmp_path):
    study(
        tmp_path,
        ("sub-1", True, None, 2, 40, "sub-1_run-3: fell asleep"),
        ("sub-2", False, "rest: 2 windows kept, fewer than 10", 1, 30, None),
        ("sub-3", True, None, 1, 20, None),
    )
    report = tmp_path / "report.html"
    report.touch()
    assert summary.closing(str(tmp_path), 61).splitlines() == [
        "",
        "2 of 3 participants are in the study, with 60 windows from 3 recordings.",
        "  set aside: sub-2 (rest: 2 windows kept, fewer than 10)",
        "  left out: sub-1_run-3: fell asleep",
        f"The report is {report}",
        "Time taken: 1 min 1 s",
        "Complete, with 1 participant set aside and recordings of 1 more left out.",
    ]


def test_a_study_of_everybody_is_complete(tmp_path):
    study(tmp_path, ("sub-1", True, None, 2, 40, None))
    assert summary.closing(str(tmp_path), 61).splitlines()[-1] == "Complete."


@pytest.mark.parametrize(
    ("seconds", "told"), [(0.2, "0 min 0 s"), (59.7, "1 min 0 s"), (3599.4, "59 min 59 s")]
)
def test_time_and_nothing_else_where_nothing_was_made(tmp_path, seconds, told):
    assert summary.closing(str(tmp_path), seconds) == f"\nTime taken: {told}\nComplete."


def test_a_job_killed_before_it_began_is_known_from_snakemakes_log(tmp_path):
    log = tmp_path / "logs" / "windows" / "sub-01" / "eeg" / "sub-01_task-x.log"
    told = f"""
Error in rule windows:
    message: None
    jobid: 6
    input: a.fif, b.npz
    log: {log} (check log file(s) for error details)

Error in rule spectra:
    jobid: 7
    log: {tmp_path}/logs/spectra/sub-02.log (check log file(s) for error details)
"""
    other = layout.record_of(f"{tmp_path}/logs/spectra/sub-02.log")
    records.note(other, "spectra", "sub-02", "no windows")
    summary.note_killed(told)
    found = {r.step: (r.scope, r.told) for r in records.unfinished(tmp_path)}
    assert found == {
        "windows": ("sub-01/eeg/sub-01_task-x", records.KILLED),
        "spectra": ("sub-02", "no windows"),  # its own reason stands
    }
