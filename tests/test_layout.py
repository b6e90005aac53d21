"""Which recordings a dataset has, which files belong to them, and where results go."""

import re
import shutil
from pathlib import Path

import pytest
from onbin import decisions, layout
from onbin.errors import DataError, SettingsError
from realdata import require
from workflow import DEMO, copy_workflow, demo_settings, planned_jobs, snakemake, write_settings


@pytest.fixture
def dataset(tmp_path):
    """Make an empty dataset of the files named."""

    def make(*files):
        for file in ("dataset_description.json", *files):
            path = tmp_path / file
            path.parent.mkdir(parents=True, exist_ok=True)
            path.touch()
        return tmp_path

    return make


def names_of(recordings):
    return [recording.name for recording in recordings]


def below(folder, recording):
    return [Path(file).relative_to(folder).as_posix() for file in recording.files]


def test_demo():
    recordings = layout.find_recordings(DEMO)
    assert names_of(recordings) == [f"sub-{n:02}/eeg/sub-{n:02}_task-panels" for n in range(1, 9)]
    assert below(DEMO, recordings[0]) == [
        "sub-01/eeg/sub-01_task-panels_eeg.vhdr",
        "sub-01/eeg/sub-01_space-CapTrak_coordsystem.json",
        "sub-01/eeg/sub-01_space-CapTrak_electrodes.tsv",
        "sub-01/eeg/sub-01_task-panels_channels.tsv",
        "sub-01/eeg/sub-01_task-panels_eeg.eeg",
        "sub-01/eeg/sub-01_task-panels_eeg.json",
        "sub-01/eeg/sub-01_task-panels_eeg.vmrk",
        "sub-01/eeg/sub-01_task-panels_events.tsv",
        "task-panels_events.json",
    ]
    assert recordings[0].participant == "sub-01"
    assert recordings[0].entities == {"sub": "01", "task": "panels"}


# The example datasets of the BIDS standard (bids-examples): number of recordings by format, as
# counted by hand below sub-*.
EXAMPLES = {
    "eeg_face13": {".edf": 10},  # 10 more lie below sourcedata
    "eeg_rest_fmri": {".vhdr": 3},  # 3 more lie below derivatives
    "eeg_ds003645s_hed_demo": {".set": 9, ".vhdr": 1},
    "eeg_ds000117": {".set": 96},
    "motion_dualtask": {".vhdr": 15},
    "eeg_rishikesh": {".bdf": 40},
}


@pytest.mark.parametrize("example", EXAMPLES)
def test_examples_of_the_standard(example):
    folder = require(f"bids-examples/{example}") / "bids-examples" / example
    recordings = layout.find_recordings(folder)
    extensions = [recording.extension for recording in recordings]
    assert {e: extensions.count(e) for e in set(extensions)} == EXAMPLES[example]
    assert len(set(names_of(recordings))) == len(recordings)
    for recording in recordings:
        assert re.fullmatch(layout.RECORDING_PATTERN, recording.name)
        assert re.fullmatch(layout.PARTICIPANT_PATTERN, recording.participant)
        assert recording.files[0] == f"{folder / recording.name}_eeg{recording.extension}"
        assert all(Path(file).is_file() for file in recording.files)
        assert len(set(recording.files)) == len(recording.files)


def test_sessions_and_runs_of_an_example():
    folder = require("bids-examples/eeg_ds003645s_hed_demo") / "bids-examples"
    folder = folder / "eeg_ds003645s_hed_demo"
    found = {recording.name: recording for recording in layout.find_recordings(folder)}
    run = found["sub-004/ses-1/eeg/sub-004_ses-1_task-FacePerception_run-2"]
    assert run.entities == {"sub": "004", "ses": "1", "task": "FacePerception", "run": "2"}
    # electrodes of its own run only; channels and positions of its session; the task's at the top
    assert below(folder, run)[1:] == [
        "sub-004/ses-1/eeg/sub-004_ses-1_run-2_electrodes.tsv",
        "sub-004/ses-1/eeg/sub-004_ses-1_task-FacePerception_run-2_events.tsv",
        "task-FacePerception_eeg.json",
        "task-FacePerception_events.json",
        "sub-004/ses-1/sub-004_ses-1_coordsystem.json",
        "sub-004/ses-1/sub-004_ses-1_task-FacePerception_channels.tsv",
    ]
    other = "sub-004/ses-2/eeg/sub-004_ses-2_task-dualWalking"
    assert names_of(layout.find_recordings(folder, ["dualWalking"])) == [other]
    assert not any("FacePerception" in file or "ses-1" in file for file in found[other].files)


def test_inheritance(dataset):
    """BIDS 1.10, inheritance principle: what names no other entity, at any level, applies."""
    folder = dataset(
        "eeg.json",
        "task-x_eeg.json",
        "task-y_eeg.json",
        "task-x_run-2_channels.tsv",
        "participants.tsv",
        "sub-1/sub-1_events.json",
        "sub-1/ses-a/sub-1_ses-a_coordsystem.json",
        "sub-1/ses-b/sub-1_ses-b_coordsystem.json",
        "sub-1/ses-a/eeg/sub-1_ses-a_task-x_run-1_eeg.vhdr",
        "sub-1/ses-a/eeg/sub-1_ses-a_task-x_run-1_eeg.eeg",
        "sub-1/ses-a/eeg/sub-1_ses-a_task-x_run-1_events.tsv",
        "sub-1/ses-a/eeg/sub-1_ses-a_task-x_run-1_photo.jpg",
        "sub-1/ses-a/eeg/sub-1_ses-a_task-x_run-2_eeg.edf",
        "sub-1/ses-a/eeg/sub-1_ses-a_task-x_run-2_events.tsv",
        "sub-1/ses-a/eeg/sub-1_ses-a_space-CTF_electrodes.tsv",
        "sub-2/eeg/sub-2_task-y_eeg.bdf",
        "derivatives/sub-1/eeg/sub-1_task-x_eeg.edf",
        "sourcedata/sub-1/eeg/sub-1_task-x_eeg.edf",
    )
    first, second, other = layout.find_recordings(folder)
    assert below(folder, first) == [
        "sub-1/ses-a/eeg/sub-1_ses-a_task-x_run-1_eeg.vhdr",
        "sub-1/ses-a/eeg/sub-1_ses-a_space-CTF_electrodes.tsv",
        "sub-1/ses-a/eeg/sub-1_ses-a_task-x_run-1_eeg.eeg",
        "sub-1/ses-a/eeg/sub-1_ses-a_task-x_run-1_events.tsv",
        "eeg.json",
        "task-x_eeg.json",
        "sub-1/sub-1_events.json",
        "sub-1/ses-a/sub-1_ses-a_coordsystem.json",
    ]
    assert "task-x_run-2_channels.tsv" in below(folder, second)
    assert below(folder, other) == ["sub-2/eeg/sub-2_task-y_eeg.bdf", "eeg.json", "task-y_eeg.json"]


def test_a_choice_of_tasks_and_participants(dataset):
    folder = dataset(
        *(f"sub-{n}/eeg/sub-{n}_task-{task}_eeg.edf" for n in (1, 2, 3) for task in ("x", "y"))
    )
    chosen = layout.find_recordings(folder, tasks=["y"], participants=["3", "1"])
    assert names_of(chosen) == ["sub-1/eeg/sub-1_task-y", "sub-3/eeg/sub-3_task-y"]


@pytest.mark.parametrize(
    ("files", "choice", "error", "message"),
    [
        ([], {}, SettingsError, r"dataset\.folder: .* has no EEG recording"),
        (["sub-1/anat/sub-1_T1w.nii"], {}, SettingsError, "has no EEG recording"),
        (["sub-1/eeg/sub-1_task-x_eeg.fif"], {}, SettingsError, r"expected files such as .*\.set"),
        (
            ["sub-1/eeg/sub-1_task-x_eeg.edf"],
            {"participants": ["1", "7"]},
            SettingsError,
            r"dataset\.participants: .* has no sub-7; it has sub-1",
        ),
        (
            ["sub-1/eeg/sub-1_task-x_eeg.edf"],
            {"tasks": ["x", "z"]},  # one that is there does not excuse the other
            SettingsError,
            r"dataset\.tasks: no recording of .* has task z; there are x",
        ),
    ],
)
def test_what_cannot_be_used(dataset, files, choice, error, message):
    with pytest.raises(error, match=message):
        layout.find_recordings(dataset(*files), **choice)


def test_a_recording_in_two_formats(dataset):
    stems = ("sub-1/eeg/sub-1_task-x_eeg", "sub-2/eeg/sub-2_task-x_eeg")
    folder = dataset(*(f"{stems[0]}{e}" for e in (".edf", ".set")),
                     *(f"{stems[1]}{e}" for e in (".vhdr", ".eeg", ".vmrk")))  # fmt: skip
    twofold, sound = layout.find_recordings(folder)
    assert layout.check_files([sound]) is None
    with pytest.raises(DataError, match=r"sub-1_task-x_eeg stands there as \.edf and \.set; keep"):
        layout.check_files([sound, twofold])


def test_a_recording_that_is_left_out_needs_no_content(tmp_path):
    """Its link leads nowhere, which stops the run until somebody decides."""
    shutil.copytree(DEMO, tmp_path / "data", ignore=shutil.ignore_patterns("sub-0[2-8]"))
    (tmp_path / "data/sub-99/eeg").mkdir(parents=True)
    (tmp_path / "data/sub-99/eeg/sub-99_task-panels_eeg.edf").symlink_to(tmp_path / "nowhere.edf")
    chosen = demo_settings(dataset={"folder": "data"})
    path = write_settings(copy_workflow(tmp_path) / "study.yaml", chosen)
    refused = snakemake(tmp_path, path, "-n", "--quiet", "rules")
    assert refused.returncode != 0
    assert "nowhere.edf, which leads nowhere. Put the file there" in refused.stderr
    (tmp_path / "decisions.tsv").write_text(
        "\t".join(decisions.HEADER)
        + "\nsub-99_task-panels\trecording\tn/a\tleave out\tlost\tAB\t2026-03-31\n"
    )
    assert planned_jobs(tmp_path, path)["intake"] == 1


def test_no_folder(tmp_path):
    with pytest.raises(SettingsError, match=r"nowhere does not exist; give the folder"):
        layout.find_recordings(tmp_path / "nowhere")
    (tmp_path / "data.zip").touch()
    with pytest.raises(SettingsError, match=r"data\.zip is a file; give the folder"):
        layout.find_recordings(tmp_path / "data.zip")


def test_paths_of_results():
    assert layout.result("out", "alpha_windows").format(participant="sub-1") == (
        "out/sub-1/eeg/sub-1_desc-alpha_windows.tsv"
    )
    assert layout.sidecar("out/a_desc-x.1_eeg.fif") == "out/a_desc-x.1_eeg.json"
    assert layout.log("out", "alpha", "sub-1") == "out/logs/alpha/sub-1.log"
    assert layout.benchmark("out", "alpha", "sub-1") == "out/logs/alpha/sub-1.benchmark.tsv"


def test_scopes_share_out_all_files_but_the_manifest_and_the_draft():
    scopes = {scope: layout.names(scope) for scope in ("recording", "participant", "study")}
    assert sorted(sum(scopes.values(), list(layout.ON_TOP))) == sorted(layout.FILES)
    assert all("{recording}" in layout.FILES[name] for name in scopes["recording"])
    assert all("{" not in layout.FILES[name] for name in scopes["study"])


def test_no_two_files_of_the_results_meet():
    """Of two recordings, their participants and the study: results, sidecars, logs, benchmarks."""
    wildcards = {
        "recording": ["sub-1/eeg/sub-1_task-x", "sub-1/eeg/sub-1_task-x_run-1"],
        "participant": ["sub-1", "sub-11"],
        "study": ["study"],
    }
    paths = ["out/manifest.tsv"]
    for scope, values in wildcards.items():
        steps = {name.split("_", 1)[0] for name in layout.names(scope)}
        for value in values:
            paths += [
                layout.result("out", name).format(**{scope: value}) for name in layout.names(scope)
            ]
            paths += [of("out", s, value) for s in steps for of in (layout.log, layout.benchmark)]
    without = ("dataset_description.json", "README", ".bidsignore")
    paths += [layout.sidecar(p) for p in paths if "/logs/" not in p and not p.endswith(without)]
    assert len(set(paths)) == len(paths)


@pytest.mark.parametrize("results", ["", "results", "derivatives", "sub-01/derivatives", ".."])
def test_results_never_fall_among_the_data(tmp_path, results):
    dataset = tmp_path / "bids"
    dataset.mkdir()
    with pytest.raises(SettingsError, match="Choose a"):
        layout.check_results(dataset / results, dataset)


@pytest.mark.parametrize("results", ["bids/derivatives/onbin", "elsewhere/new/results"])
def test_results_may_lie_beside_the_data(tmp_path, results):
    (tmp_path / "bids").mkdir()
    assert layout.check_results(tmp_path / results, tmp_path / "bids") is None


def test_results_below_a_file_are_refused(tmp_path):
    (tmp_path / "bids").mkdir()
    (tmp_path / "file").touch()
    with pytest.raises(SettingsError, match="is a file"):
        layout.check_results(tmp_path / "file" / "results", tmp_path / "bids")
