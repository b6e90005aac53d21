"""A step leaves whole outputs or none, and says in one line what went wrong."""

import json
import os
import re
import socket
import subprocess
import sys
import warnings
from pathlib import Path
from types import SimpleNamespace

import pytest
from onbin import layout, provenance, records, tables
from onbin.errors import DataError
from onbin.runner import run


class Named:
    """Named values as Snakemake hands them to a script."""

    def __init__(self, **named):
        self.__dict__.update(named)

    def items(self):
        return self.__dict__.items()

    def __iter__(self):
        for value in self.__dict__.values():
            yield from [value] if isinstance(value, str) else value


@pytest.fixture
def job(tmp_path):
    source = tmp_path / "raw.edf"
    source.write_bytes(b"signal")
    signal, gains = tmp_path / "out/a_desc-x_eeg.fif", tmp_path / "out/a_desc-x_gains.tsv"
    sidecars = [layout.sidecar(path) for path in (signal, gains)]
    return SimpleNamespace(
        input=Named(signal=str(source)),
        output=Named(signal=str(signal), gains=str(gains), sidecars=sidecars),
        params=Named(settings={"level": 0.05}),
        log=[str(tmp_path / "logs/filter/a.log")],
        rule="filter",
        wildcards=Named(recording="sub-1/eeg/sub-1_task-x"),
    )


def make_both(inputs, outputs, settings):
    outputs.signal.write_bytes(Path(inputs.signal).read_bytes() * 2)
    tables.write_table(outputs.gains, [{"gain": settings["level"]}], ["gain"])


def left(job):
    """What stands where the outputs belong."""
    folder = Path(job.output.signal).parent
    return sorted(path.name for path in folder.iterdir())


def log_of(job):
    return Path(job.log[0]).read_text(encoding="utf-8")


def test_outputs_and_sidecars_come_together(job, capfd):
    run(make_both, job)
    assert left(job) == [
        "a_desc-x_eeg.fif",
        "a_desc-x_eeg.json",
        "a_desc-x_gains.json",
        "a_desc-x_gains.tsv",
    ]
    assert Path(job.output.signal).read_bytes() == b"signalsignal"
    of_signal, of_gains = (json.loads(Path(p).read_text()) for p in job.output.sidecars)
    for path, sidecar in ((job.output.signal, of_signal), (job.output.gains, of_gains)):
        noted = sidecar["Provenance"]
        assert (noted["step"], noted["settings"]) == ("filter", {"level": 0.05})
        assert noted["sha256"] == provenance.sha256(path)
        assert noted["inputs"] == {job.input.signal: provenance.sha256(job.input.signal)}
    assert of_gains["gain"] == tables.dictionary(["gain"])["gain"]
    assert "filter" in of_signal["Description"]
    assert capfd.readouterr() == ("", "")


def test_nothing_is_seen_before_all_is_made(job):
    def step(inputs, outputs, settings):
        make_both(inputs, outputs, settings)
        assert not any(name.startswith("a_") for name in left(job))

    run(step, job)


def test_outputs_in_several_folders_without_sidecars(job, tmp_path):
    job.output = Named(page=str(tmp_path / "r/report.html"), bins=str(tmp_path / "r/f/bins.png"))

    def step(inputs, outputs, settings):
        outputs.page.write_text("page")
        outputs.bins.write_text("bins")

    run(step, job)
    found = (path.relative_to(tmp_path).as_posix() for path in (tmp_path / "r").rglob("*"))
    assert sorted(found) == ["r/f", "r/f/bins.png", "r/report.html"]


def fail_half_way(inputs, outputs, settings):
    outputs.signal.write_bytes(b"whole")
    outputs.gains.write_bytes(b"ha")
    raise DataError("channel Oz: found 3 samples, expected 100; record longer.")


def break_half_way(inputs, outputs, settings):
    outputs.signal.write_bytes(b"whole")
    raise ZeroDivisionError("division by zero")


def forget_an_output(inputs, outputs, settings):
    outputs.signal.write_bytes(b"whole")


def end_half_way(inputs, outputs, settings):
    outputs.signal.write_bytes(b"whole")
    raise KeyboardInterrupt


@pytest.mark.parametrize("step", [fail_half_way, break_half_way, forget_an_output, end_half_way])
def test_a_step_that_fails_leaves_nothing(job, step):
    ending = KeyboardInterrupt if step is end_half_way else SystemExit
    with pytest.raises(ending):
        run(step, job)
    assert left(job) == []


def test_a_users_mistake_is_one_message_without_traceback(job, capfd):
    with pytest.raises(SystemExit) as ended:
        run(fail_half_way, job)
    assert ended.value.code == 1
    out, err = capfd.readouterr()
    message = "filter: channel Oz: found 3 samples, expected 100; record longer."
    assert out == ""
    assert err == f"\nsub-1/eeg/sub-1_task-x, {message}\n\n"
    first, peak = log_of(job).splitlines()
    assert first == f"ERROR {message}"
    assert re.fullmatch(r"INFO peak memory: [1-9]\d* MiB", peak)
    (record,) = records.unfinished(Path(job.log[0]).parents[2])
    assert (record.step, record.scope) == ("filter", "sub-1/eeg/sub-1_task-x")
    assert message.endswith(record.told)


def test_a_link_in_the_place_of_a_log_is_replaced_and_not_followed(job, tmp_path):
    path, victim = Path(job.log[0]), tmp_path / "victim.txt"
    victim.write_text("mine")
    path.parent.mkdir(parents=True)
    path.symlink_to(victim)
    run(make_both, job)
    assert (victim.read_text(), path.is_symlink()) == ("mine", False)
    assert "peak memory" in log_of(job)


def test_names_that_are_no_text_are_logged(job):
    name = os.fsdecode(b"sub-\xff")  # as Python shows a name of other bytes

    def step(inputs, outputs, settings):
        print(name)
        make_both(inputs, outputs, settings)

    run(step, job)
    assert "sub-\\udcff\n" in log_of(job)


def test_what_is_unexpected_has_its_traceback_in_the_log_alone(job, capfd):
    job.wildcards = Named()
    with pytest.raises(SystemExit) as ended:
        run(break_half_way, job)
    assert ended.value.code == 1
    err = capfd.readouterr().err
    assert err.strip() == (
        "study, filter: failed unexpectedly (ZeroDivisionError: division by zero). "
        "The log has the details."
    )
    assert "Traceback" in log_of(job)
    assert "in break_half_way" in log_of(job)


def test_warnings_and_prints_go_to_the_log(job, capfd):
    def step(inputs, outputs, settings):
        warnings.warn("careful", RuntimeWarning, stacklevel=1)
        print("said in passing")
        make_both(inputs, outputs, settings)

    kept = sys.stdout, warnings.showwarning
    with warnings.catch_warnings():
        warnings.simplefilter("always")
        run(step, job)
    assert (sys.stdout, warnings.showwarning) == kept
    assert "WARNING RuntimeWarning: careful\n" in log_of(job)
    assert "said in passing\n" in log_of(job)
    assert capfd.readouterr() == ("", "")


def test_logs_of_two_jobs_do_not_mix(job, tmp_path):
    def step(inputs, outputs, settings):
        print(settings["level"])
        make_both(inputs, outputs, settings)

    run(step, job)
    first, job.log, job.params.settings = job.log, [str(tmp_path / "other.log")], {"level": 1}
    run(step, job)
    logs = (Path(first[0]).read_text(), log_of(job))
    assert [text.splitlines()[0] for text in logs] == ["0.05", "1"]


def test_what_dead_processes_left_is_taken_away(job):
    ended = subprocess.Popen([sys.executable, "-c", ""])
    ended.wait()
    folder = Path(job.output.signal).parent
    mark = f".part-{Path(job.output.signal).name}-{socket.gethostname()}-"
    dead, before_us = f"{mark}{ended.pid}", f"{mark}{os.getpid()}"
    alive, elsewhere = f"{mark}{os.getppid()}", f".part-a_desc-x_eeg.fif-elsewhere-{ended.pid}"
    like_ours = f"{mark}2-{ended.pid}"  # a host whose name begins like this one's
    for name in (dead, before_us, alive, elsewhere, like_ours):
        (folder / name).mkdir(parents=True)
        (folder / name / "half.fif").touch()
    run(make_both, job)
    assert {name for name in left(job) if name.startswith(".part-")} == {
        alive,
        elsewhere,
        like_ours,
    }
    assert Path(job.output.signal).exists()
