"""Records of what is under way outlive a job that is killed, and hold results for one run."""

import os
import subprocess
import sys

import pytest
from onbin import layout, records
from onbin.errors import OnbinError
from onbin.layout import Recording
from onbin.summary import failed, failed_recordings, opening, without_failed

STEP, SCOPE = "windows", "sub-01/eeg/sub-01_task-x"
RECORDINGS = [Recording(f"sub-0{n}/eeg/sub-0{n}_task-x", ".edf", ()) for n in (1, 2)]


@pytest.fixture
def dead():
    """What described a process that is gone."""
    child = subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE)
    identity = records.process(child.pid)
    assert records.is_running(identity)
    child.communicate()
    return identity


def left_by(results, identity, step=STEP, scope=SCOPE, reason=None, host=None):
    path = layout.record_of(layout.log(str(results), step, scope))
    records.note(path, step, scope, reason)
    text = path.read_text().replace(records.process(os.getpid()), identity)
    path.write_text(text.replace(os.uname().nodename, host) if host else text)
    return path


def test_a_process_is_known_by_its_number_and_start(dead):
    own = records.process(os.getpid())
    assert own.split()[0] == str(os.getpid())
    assert records.is_running(own)
    assert not records.is_running(own + "9")  # the same number, started at another time
    assert not records.is_running(dead)


def test_a_job_under_way_is_not_unfinished(tmp_path):
    path = layout.record_of(layout.log(str(tmp_path), STEP, SCOPE))
    records.note(path, STEP, SCOPE)
    assert list(records.unfinished(tmp_path)) == []
    records.end(path)
    assert not path.exists()


def test_what_is_left_tells_why(tmp_path, dead):
    left_by(tmp_path, dead)
    left_by(tmp_path, dead, step="spectra", scope="sub-02", reason="no windows")
    found = {record.step: record for record in records.unfinished(tmp_path)}
    assert found["windows"].told == records.KILLED
    assert found["spectra"].told == "no windows"


def test_a_damaged_record_is_passed_over(tmp_path, dead):
    path = left_by(tmp_path, dead)
    for text in ("", "{", "[]", '{"step": "windows", "odd": 1}'):
        path.write_text(text)
        assert list(records.unfinished(tmp_path)) == []


def test_results_are_held_by_one_run(tmp_path, dead):
    assert records.claim(tmp_path) is None
    with pytest.raises(OnbinError, match="another run is at work"):
        records.claim(tmp_path)
    mark = tmp_path / layout.RUN_RECORD
    mark.write_text(mark.read_text().replace(records.process(os.getpid()), dead))
    before = records.claim(tmp_path)  # that run is gone
    assert before.process == dead
    records.release(tmp_path)
    assert not mark.exists()


def test_a_mark_of_another_run_is_not_taken_away(tmp_path, dead):
    records.claim(tmp_path)
    mark = tmp_path / layout.RUN_RECORD
    mark.write_text(mark.read_text().replace(records.process(os.getpid()), dead))
    records.release(tmp_path)
    assert mark.exists()


def test_failures_name_recordings_reasons_and_the_line_to_paste(tmp_path, dead):
    left_by(tmp_path, dead)
    left_by(tmp_path, dead, step="spectra", scope="sub-02", reason="no\twindows\nat all")
    left_by(tmp_path, dead, scope="sub-09/eeg/sub-09_task-x", reason="of no recording taken")
    left = list(records.unfinished(tmp_path))
    assert failed_recordings(left, RECORDINGS) == {
        "sub-02_task-x": "failed in the step spectra: no\twindows\nat all",
        "sub-01_task-x": f"failed in the step windows: {records.KILLED}",
    }
    text = failed(str(tmp_path), RECORDINGS, ["--cores", "1"])
    assert "2 steps failed; all that does not rest on them is done." in text
    assert "snakemake --cores 1 --config leave_out_failed=true" in text
    assert (
        "  sub-02_task-x\trecording\tn/a\tleave out\tfailed in the step spectra: no windows at all"
        "\tonbin\tn/a\n" in text
    )
    assert "sub-09" not in text
    assert text.endswith("Failed: 2 steps.")


def test_without_records_the_run_itself_failed(tmp_path):
    assert "what Snakemake says above tells why" in failed(str(tmp_path), RECORDINGS, [])


def test_the_switch_goes_before_the_targets():
    assert without_failed(["--configfile", "a b.yaml", "--", "report"]) == (
        "snakemake --configfile 'a b.yaml' --config leave_out_failed=true -- report"
    )


def test_what_is_found_is_told(tmp_path, dead):
    (tmp_path / "a").write_text("")
    left_by(tmp_path, dead)
    text = opening([str(tmp_path / "a"), str(tmp_path / "b")], None, str(tmp_path))
    assert "Found 1 of 2 files of the study" in text
    assert "1 step had not ended well and will be made anew:\n  windows of sub-01" in text
    assert "broken off" not in text
