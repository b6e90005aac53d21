# The settings, the recordings, and how rules name files, settings and code.

import atexit
import os
import sys
import time
from pathlib import Path

sys.path.insert(0, str(Path(workflow.basedir) / "scripts"))

from onbin import decisions, layout, records, summary
from onbin.errors import OnbinError
from onbin.fingerprint import fingerprint
from onbin.settings import load_settings, part

# Jobs run side by side, so each takes one thread; it also keeps sums in one order.
os.environ.setdefault("OMP_NUM_THREADS", "1")
STARTED_S = time.monotonic()

SETTINGS = Path(
    [*workflow.configfiles, Path(workflow.basedir) / "config" / "config.yaml"][0]
)

try:
    STUDY = load_settings(SETTINGS, workflow.config_settings.config)
    layout.check_results(STUDY.dataset.results, STUDY.dataset.folder)
    FOUND = layout.find_recordings(
        STUDY.dataset.folder, STUDY.dataset.tasks, STUDY.dataset.participants
    )
    DECISIONS_FILE = os.path.relpath(SETTINGS.parent / STUDY.dataset.decisions)
    DECISIONS = decisions.read(DECISIONS_FILE, [recording.stem for recording in FOUND])
    LEFT_OUT = decisions.left_out(DECISIONS)
    if STUDY.leave_out_failed:
        LEFT_OUT |= summary.failed_recordings(
            records.unfinished(STUDY.dataset.results), FOUND
        )
    RECORDINGS = decisions.remaining(FOUND, LEFT_OUT)
    layout.check_files(RECORDINGS)
except OnbinError as error:
    sys.exit(f"\n{error}\n")

RESULTS = STUDY.dataset.results
RECORDING = {recording.name: recording for recording in RECORDINGS}
PARTICIPANTS = sorted({recording.participant for recording in RECORDINGS})


wildcard_constraints:
    recording=layout.RECORDING_PATTERN,
    participant=layout.PARTICIPANT_PATTERN,


def result(name):
    """Path of a file of the results, with its wildcards."""
    return layout.result(RESULTS, name)


def made(step, *names):
    """Outputs of a step by name, and their sidecars."""
    paths = {name: result(f"{step}_{name}") for name in names}
    return paths | {"sidecars": [layout.sidecar(path) for path in paths.values()]}


def of_participant(name):
    """Input function: a file of each of a participant's recordings."""
    return lambda wildcards: [
        result(name).format(recording=recording)
        for recording in recordings_of(wildcards.participant)
    ]


def recordings_of(participant):
    return [r.name for r in RECORDINGS if r.participant == participant]


def left_out_by_participant():
    """Why recordings are left out, by participant and name."""
    why = {who: {} for who in {r.participant for r in FOUND if r.stem in LEFT_OUT}}
    for recording in FOUND:
        if recording.stem in LEFT_OUT:
            why[recording.participant][recording.name] = LEFT_OUT[recording.stem]
    return {who: why[who] for who in sorted(why)}


def of_all_recordings(name):
    return [result(name).format(recording=recording.name) for recording in RECORDINGS]


def of_all_participants(name):
    return [
        result(name).format(participant=participant) for participant in PARTICIPANTS
    ]


def everything():
    """Every file of the results but the manifest."""
    return [
        *(
            path
            for name in layout.names("recording")
            for path in of_all_recordings(name)
        ),
        *(
            path
            for name in layout.names("participant")
            for path in of_all_participants(name)
        ),
        *(result(name) for name in layout.names("study")),
    ]


def participants_table():
    """participants.tsv of the dataset, if it has one."""
    path = Path(STUDY.dataset.folder) / "participants.tsv"
    return [str(path)] if path.is_file() else []


def decided(kind, recording):
    """What was decided about a recording's channels or components, and where that stands."""
    stem = RECORDING[recording].stem
    chosen = decisions.about(DECISIONS, stem, kind)
    return {
        "decisions": chosen,
        "decisions_file": DECISIONS_FILE if chosen else None,
        "recording": stem,
    }


def settings_part(*names, **others):
    """A rule's own part of the settings."""
    return part(STUDY, *names) | others


def code(step):
    """What code a step rests on."""
    return fingerprint(Path(workflow.basedir) / "scripts" / f"{step}.py")


def log_of(step, scope="study"):
    return layout.log(RESULTS, step, scope)


def benchmark_of(step, scope="study"):
    return layout.benchmark(RESULTS, step, scope)


def begin_run():
    """Take the results for this run and say what is there."""
    try:
        before = records.claim(RESULTS)
    except OnbinError as error:
        say_last(f"\n{error}")
        sys.exit(1)
    atexit.register(records.release, RESULTS)
    there = summary.opening([*everything(), result("manifest_files")], before, RESULTS)
    print(there, file=sys.stderr, flush=True)


def say_last(text):
    """Say something after all that Snakemake has to say."""
    atexit.register(print, text, file=sys.stderr, flush=True)


def closing_summary():
    return summary.closing(RESULTS, time.monotonic() - STARTED_S)


def closing_failures(log):
    for path in [log] if isinstance(log, str) else log:
        summary.note_killed(Path(path).read_text(encoding="utf-8", errors="replace"))
    return summary.failed(RESULTS, RECORDINGS, sys.argv[1:])
