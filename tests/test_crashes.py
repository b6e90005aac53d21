"""Nothing is lost and nothing half-believed: kills, a full disk, two runs at once, odd clocks."""

import json
import os
import random
import re
import resource
import shutil
import signal
import subprocess
import sys
import time
from dataclasses import dataclass
from pathlib import Path

import psutil
import pytest
from conftest import digests, run_study
from onbin import layout, records
from workflow import DEMO, copy_workflow, demo_settings, planned_jobs, snakemake, write_settings

pytestmark = pytest.mark.workflow

STARTED = re.compile(r"^Job \d+: (.*)$")
FINISHED = re.compile(r"^Finished jobid: (\d+)")
NUMBERED = re.compile(r"^Job (\d+): (.*)$")
LONGEST_S = 300


@dataclass(frozen=True)
class Undisturbed:
    """A small study that was run without a disturbance."""

    folder: Path
    settings: Path
    files: dict[str, str]


def results_of(folder):
    """Everything that the study made, without the logs, by content."""
    return {
        name: digest
        for name, digest in digests(folder / "results").items()
        if not name.startswith("logs/")
    }


def small_settings(data):
    return demo_settings(
        dataset={"folder": data, "results": "results"},
        flicker={},
        trust={"min_windows": 2, "min_rest_windows": 1},
    )


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory):
    """Two people with 4 trials a panel, beside the workflow."""
    folder = tmp_path_factory.mktemp("undisturbed")
    make = [sys.executable, str(DEMO / "code" / "make_demo.py"), "--out", str(folder / "data")]
    subprocess.run([*make, "--people", "2", "--trials", "4"], check=True, capture_output=True)
    finished = run_study(folder, small_settings("data"))
    assert finished.exit_code == 0, finished.output
    assert finished.output.rstrip().endswith("Complete.")
    return Undisturbed(folder, finished.settings, results_of(folder))


@pytest.fixture
def study(undisturbed, tmp_path):
    """The same study with nothing done."""
    copy_workflow(tmp_path)
    shutil.copytree(undisturbed.folder / "data", tmp_path / "data")
    return tmp_path, write_settings(tmp_path / "study.yaml", small_settings("data"))


@pytest.fixture
def moved(undisturbed, tmp_path):
    """A copy of the whole folder in another place, with new dates in any order."""
    copy = tmp_path / "elsewhere"
    shutil.copytree(undisturbed.folder, copy, copy_function=shutil.copyfile)
    return copy, copy / "study.yaml"


# --- kills ----------------------------------------------------------------------------------------


class Run:
    """A run of Snakemake that a test may kill."""

    def __init__(self, folder, settings, log):
        self.log = log
        command = [
            sys.executable, "-m", "snakemake", "--configfile", settings.name,
            "--workflow-profile", "config/profiles/local",
        ]  # fmt: skip
        with open(log, "w") as file:
            self.process = subprocess.Popen(
                command, cwd=folder, stdout=file, stderr=subprocess.STDOUT, start_new_session=True
            )

    def jobs(self):
        """Processes that do the work of a step."""
        try:
            children = psutil.Process(self.process.pid).children(recursive=True)
            return [c for c in children if ".snakemake/scripts" in " ".join(c.cmdline())]
        except psutil.Error:
            return []

    def kill(self, what):
        """Kill a job, the run, or both; tell whether there was anything to kill."""
        if self.process.poll() is not None:
            return False
        jobs = self.jobs()
        if what == "job" and not jobs:
            return False
        for process in jobs if what == "both" else jobs[:1] if what == "job" else []:
            try:
                process.kill()
            except psutil.NoSuchProcess:
                return False
        if what != "job":
            self.process.kill()
        return True

    def wait(self):
        return self.process.wait(LONGEST_S)

    def text(self):
        return self.log.read_text(errors="replace")

    def finished(self):
        """Jobs that the run knows to be finished, in its own words."""
        names = dict(m.groups() for m in map(NUMBERED.match, self.text().splitlines()) if m)
        ended = [m[1] for m in map(FINISHED.match, self.text().splitlines()) if m]
        return {names[number] for number in ended if number in names}

    def started(self):
        return [m[1] for m in map(STARTED.match, self.text().splitlines()) if m]


@pytest.mark.parametrize("kills", [2, pytest.param(25, marks=pytest.mark.long)])
def test_killed_runs_end_in_the_same_results(undisturbed, study, tmp_path, kills):
    folder, settings = study
    rng = random.Random(kills)
    survived, finished = 0, set()
    for attempt in range(4 * kills + 4):
        run = Run(folder, settings, tmp_path / f"{attempt}.log")
        what = rng.choice(["job", "run", "both"])
        killed = False
        if survived < kills:
            deadline = time.monotonic() + rng.uniform(3, 14)
            while time.monotonic() < deadline and run.process.poll() is None:
                time.sleep(0.05)
            killed = run.kill(what)
            survived += killed
        code = run.wait()
        text = run.text()
        again = finished & set(run.started())
        assert not again, f"done twice: {again}"
        assert "Traceback" not in text
        finished |= run.finished()
        if killed and what == "job":
            assert code == 1
            assert records.KILLED in text
            assert "Failed: 1 step." in text.splitlines()[-1]
        if code == 0:
            assert results_of(folder) == undisturbed.files
            left = [p for p in (folder / "results").rglob(".part-*") if p.is_dir()]
            assert left == []
            if survived == kills:
                break
            shutil.rmtree(folder / "results")
            finished = set()
    assert survived == kills
    print(f"{survived} kills survived in {attempt + 1} runs")


def test_resuming_says_what_it_found(undisturbed, moved):
    folder, settings = moved
    results = folder / "results"
    gone = records.process(os.getpid()).replace(" ", " 0")  # this number, but another start
    here = {"host": os.uname().nodename, "process": gone}
    (results / layout.RUN_RECORD).write_text(
        json.dumps({"step": "run", "scope": "study", "reason": None} | here)
    )
    scope = "sub-01/eeg/sub-01_task-panels"
    record = layout.record_of(layout.log(str(results), "windows", scope))
    record.write_text(json.dumps({"step": "windows", "scope": scope, "reason": None} | here))
    (results / f"{scope}_desc-clean_eeg.fif").unlink()
    (results / "report.html").unlink()
    done = snakemake(folder, settings)
    text = done.stdout + done.stderr
    assert done.returncode == 0
    assert "The run before this one was broken off; what it finished is kept." in text
    assert re.search(r"Found \d+ of \d+ files of the study", text)
    assert "1 step had not ended well and will be made anew:" in text
    assert f"  windows of {scope}" in text
    assert not record.exists()
    assert results_of(folder) == undisturbed.files


# --- two runs, marks that are left ----------------------------------------------------------------


def test_a_second_run_on_the_same_results_is_refused(moved):
    folder, settings = moved
    (folder / "results" / "report.html").unlink()
    other = subprocess.Popen([sys.executable, "-c", "import time; time.sleep(100)"])
    try:
        mark = {
            "step": "run", "scope": "study", "reason": None, "host": os.uname().nodename,
            "process": records.process(other.pid),
        }  # fmt: skip
        (folder / "results" / layout.RUN_RECORD).write_text(json.dumps(mark))
        done = snakemake(folder, settings)
        text = done.stdout + done.stderr
        assert done.returncode == 1
        assert f"another run is at work on results (process {other.pid} on this machine)" in text
        assert "Traceback" not in text
        assert not (folder / "results" / "report.html").exists()
        assert (folder / "results" / layout.RUN_RECORD).exists()
    finally:
        other.kill()
        other.wait()


def test_a_mark_of_another_machine_is_explained_with_the_command_that_clears_it(moved):
    folder, settings = moved
    (folder / "results" / "report.html").unlink()
    mark = {"step": "run", "scope": "study", "reason": None, "host": "node-7", "process": "12 3"}
    (folder / "results" / layout.RUN_RECORD).write_text(json.dumps(mark))
    done = snakemake(folder, settings)
    text = done.stdout + done.stderr
    assert done.returncode == 1
    (sentence,) = [line for line in text.splitlines() if "node-7" in line]
    command = sentence.rpartition("with: ")[2]
    assert command == f"rm results/{layout.RUN_RECORD}"
    subprocess.run(command.split(), cwd=folder, check=True)
    assert records.claim(folder / "results") is None


# --- dates ----------------------------------------------------------------------------------------


def test_a_copy_elsewhere_has_nothing_to_do(moved):
    assert planned_jobs(*moved) == {}


def test_a_clock_that_jumps_makes_nothing_run_again(moved):
    folder, settings = moved
    rng = random.Random(4)
    for path in sorted(p for p in folder.rglob("*") if p.is_file()):
        at_s = time.time() + rng.uniform(-3e8, 3e8)
        os.utime(path, (at_s, at_s))
    assert planned_jobs(folder, settings) == {}


def test_changed_content_runs_again_whatever_its_date(moved):
    folder, settings = moved
    path = folder / "data" / "sub-01" / "eeg" / "sub-01_task-panels_events.tsv"
    lines = path.read_text().splitlines(keepends=True)
    path.write_text("".join(lines[:-1]))
    assert planned_jobs(folder, settings)["intake"] == 1


# --- one bad recording ----------------------------------------------------------------------------


def test_one_bad_recording_does_not_cost_the_others(moved):
    folder, settings = moved
    (folder / "data" / "sub-01" / "eeg" / "sub-01_task-panels_eeg.eeg").write_bytes(b"")
    of_another = folder / "results/sub-02/eeg/sub-02_desc-alpha_measures.tsv"
    of_another.unlink()
    done = snakemake(folder, settings)
    text = done.stdout + done.stderr
    assert done.returncode == 1
    assert of_another.exists()
    assert "sub-01/eeg/sub-01_task-panels, intake: " in text
    assert text.splitlines()[-1] == "Failed: 1 step."
    pasted = next(line for line in text.splitlines() if line.startswith("  sub-01_task-panels\t"))
    header = next(line for line in text.splitlines() if line.startswith("  recording\t"))

    switched = snakemake(folder, settings, "--config", "leave_out_failed=true")
    text = switched.stdout + switched.stderr
    assert switched.returncode == 0, text
    assert text.splitlines()[-1] == "Complete, with 1 participant set aside."
    page = (folder / "results/report.html").read_text()
    assert "Left out (1 recording):" in page
    assert "failed in the step intake" in page
    assert "sub-01_task-panels" in (folder / "results/study/participants.tsv").read_text()

    # the pasted line says the same for good: only what names the reason is made again
    (folder / "decisions.tsv").write_text(f"{header.strip()}\n{pasted.strip()}\n")
    jobs = planned_jobs(folder, settings)
    assert set(jobs) <= {"study", "report", "manifest"}, jobs


# --- disk and memory ------------------------------------------------------------------------------

FILL = """
import sys
from pathlib import Path
from types import SimpleNamespace
sys.path[:0] = [{scripts!r}, {tests!r}]
from test_runner import Named
from onbin.runner import run
def fill(inputs, outputs, settings):
    {work}
job = SimpleNamespace(
    input=Named(), output=Named(signal={out!r}), params=Named(settings={{}}), log=[{log!r}],
    rule="intake", wildcards=Named(recording="sub-1/eeg/sub-1_task-x"),
)
run(fill, job)
"""
TESTS = Path(__file__).parent


def run_job(folder, work, **options):
    """Run a job that does some work in a process of its own."""
    code = FILL.format(
        scripts=str(TESTS.parent / "scripts"), tests=str(TESTS), work=work,
        out=str(folder / "out" / "signal.fif"), log=str(folder / "logs" / "intake" / "x.log"),
    )  # fmt: skip
    return subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=False, **options
    )


def no_half_outputs(folder):
    return [p.name for p in (folder / "out").rglob("*")] == []


@pytest.fixture
def small_disk(tmp_path):
    place = tmp_path / "disk"
    place.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=1m", "tmpfs", str(place)]
    if subprocess.run(mount, capture_output=True, check=False).returncode:
        pytest.skip("a small disk can be mounted by root alone")
    yield place
    subprocess.run(["umount", str(place)], check=True)


def test_a_full_disk_is_told_and_nothing_half_made_is_left(small_disk):
    done = run_job(small_disk, "outputs.signal.write_bytes(bytes(2_000_000))")
    assert done.returncode == 1
    assert "sub-1/eeg/sub-1_task-x, intake: the disk is full" in done.stderr
    assert "Make room and give the same command again" in done.stderr
    assert "Traceback" not in done.stderr
    assert no_half_outputs(small_disk)


def test_a_disk_that_is_full_before_the_job_begins(small_disk):
    (small_disk / "fill").write_bytes(bytes(1024 * 1024 - 40 * 1024))
    for number in range(500):
        try:
            (small_disk / f"more{number}").write_bytes(bytes(4096))
        except OSError:
            break
    done = run_job(small_disk, "outputs.signal.write_bytes(bytes(100_000))")
    assert done.returncode == 1
    assert "the disk is full" in done.stderr
    assert "Traceback" not in done.stderr


def test_a_limit_on_the_size_of_files_is_told_like_a_full_disk(tmp_path):
    def limit():
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
        resource.setrlimit(resource.RLIMIT_FSIZE, (1_000_000, 1_000_000))

    done = run_job(tmp_path, "outputs.signal.write_bytes(bytes(2_000_000))", preexec_fn=limit)
    assert done.returncode == 1
    assert "the disk is full" in done.stderr
    assert no_half_outputs(tmp_path)


def test_a_folder_that_becomes_unwritable_is_told(tmp_path):
    done = run_job(
        tmp_path,
        "import errno, os; raise PermissionError(errno.EACCES, 'Permission denied', 'out')",
    )
    assert done.returncode == 1
    assert "out cannot be read or written (Permission denied)" in done.stderr
    assert "permissions of the file and its folder" in done.stderr
    assert "Traceback" not in done.stderr


def test_a_lack_of_memory_is_told(tmp_path):
    def limit():
        resource.setrlimit(resource.RLIMIT_AS, (2**31, 2**31))

    done = run_job(tmp_path, "bytes(2**32)", preexec_fn=limit)
    assert done.returncode == 1
    assert "more memory was needed than there was" in done.stderr
    assert "--set-resources intake:mem_mb=4000" in done.stderr
    assert "Traceback" not in done.stderr


def test_a_job_that_is_killed_leaves_a_record(tmp_path):
    done = run_job(tmp_path, "import os, signal; os.kill(os.getpid(), signal.SIGKILL)")
    assert done.returncode == -signal.SIGKILL
    (record,) = records.unfinished(tmp_path)
    assert (record.step, record.scope) == ("intake", "sub-1/eeg/sub-1_task-x")
    assert record.told == records.KILLED
    again = run_job(tmp_path, "outputs.signal.write_bytes(b'1')")
    assert again.returncode == 0, again.stderr
    assert list(records.unfinished(tmp_path)) == []
