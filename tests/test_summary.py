"""What is said at the end: who is in the study, who is not and why, where to look."""

import pytest
from onbin import layout, summary, tables

COLUMNS = ["participant", "in_study", "reason", "recordings", "windows_kept"]


def study(results, *rows):
    path = layout.result(results, "study_participants")
    (results / "study").mkdir()
    tables.write_table(path, [dict(zip(COLUMNS, row, strict=True)) for row in rows], COLUMNS)


def test_people_and_report(tmp_path):
    study(
        tmp_path,
        ("sub-1", True, None, 2, 40),
        ("sub-2", False, "rest: 2 windows kept, fewer than 10", 1, 30),
        ("sub-3", True, None, 1, 20),
    )
    report = tmp_path / "report.html"
    report.touch()
    assert summary.closing(str(tmp_path), 61).splitlines() == [
        "",
        "2 of 3 participants are in the study, with 60 windows from 3 recordings.",
        "  set aside: sub-2 (rest: 2 windows kept, fewer than 10)",
        f"The report is {report}",
        "Time taken: 1 min 1 s",
    ]


@pytest.mark.parametrize(
    ("seconds", "told"), [(0.2, "0 min 0 s"), (59.7, "1 min 0 s"), (3599.4, "59 min 59 s")]
)
def test_time_and_nothing_else_where_nothing_was_made(tmp_path, seconds, told):
    assert summary.closing(str(tmp_path), seconds) == f"\nTime taken: {told}"


def test_failures_are_listed_with_their_reason_and_log(tmp_path):
    log = tmp_path / "logs" / "intake" / "sub-02" / "eeg" / "sub-02_task-x.log"
    log.parent.mkdir(parents=True)
    log.write_text("INFO reading\nERROR intake: no events. Give some.\n")
    told = summary.failed(str(tmp_path), since=0)
    assert told.startswith("\n1 failed")
    assert "sub-02/eeg/sub-02_task-x, intake: no events. Give some." in told
    assert str(log) in told
    assert "1 failed" not in summary.failed(str(tmp_path), since=log.stat().st_mtime + 1)
