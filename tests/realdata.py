"""Small real recordings of other people, turned into BIDS datasets in a temporary folder.

The recordings are no part of the project and are only read, never written to. They are found
through the environment variable ONBIN_REAL_DATA (default: ``../shared/data`` from the repository).
"""

import json
import os
import warnings
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

REPOSITORY = Path(__file__).resolve().parents[1]

LED_TAGS_HZ = (5, 6, 7, 8)
# fmt: off
LED_CHANNELS = (
    "O2", "AF3", "AF4", "P4", "P3", "F4", "Fz", "F3",
    "FCz", "Pz", "C4", "C3", "CPz", "Cz", "Oz", "O1",
)
# fmt: on
LED_SAMPLING_HZ = 256.0

EYES_FILES = {"eyes_open": "S001R01.edf", "eyes_closed": "S001R02_repaired60s.edf"}

# The display could not show 6.6 Hz: the conditions keep the name that the experimenter gave them.
FLICKER_FILES = {
    "aThong3.mat": "flicker_6p6",
    "aThong4.mat": "flicker_6p6",
    "aThong5.mat": "flicker_7p5",
    "aThong6.mat": "flicker_7p5",
}
FLICKER_CHANNELS = ("O1", "Oz", "O2")
FLICKER_S = 10.0
FLICKER_UV_PER_UNIT = 0.1


@dataclass(frozen=True)
class _Recording:
    subject: str
    run: int
    signal_uv: np.ndarray  # channels × samples
    sampling_hz: float
    channels: tuple[str, ...]
    events: tuple[tuple[float, float, str], ...]  # onset_s, duration_s, trial_type


def real_data_folder() -> Path | None:
    """Return the folder of the real recordings, or None where there is none.

    A relative ONBIN_REAL_DATA is taken from the repository root.
    """
    folder = REPOSITORY / (os.environ.get("ONBIN_REAL_DATA") or "../shared/data")
    return folder.resolve() if folder.is_dir() else None


def require(*names: str) -> Path:
    """Return the folder of the real recordings; skip the test unless all of `names` are in it."""
    folder = real_data_folder()
    if folder is None:
        pytest.skip("the real recordings are not here (ONBIN_REAL_DATA names their folder)")
    absent = [name for name in names if not (folder / name).exists()]
    if absent:
        pytest.skip(f"the real recordings lack {', '.join(absent)}")
    return folder


def led_dataset(out: Path) -> Path:
    """Write five people's responses to LEDs of 5, 6, 7 and 8 Hz to `out`; return `out`."""
    from scipy.io import loadmat

    source = require("kolodziej") / "kolodziej"
    recordings = []
    for person in range(1, 6):
        for run, tag_hz in enumerate(LED_TAGS_HZ, start=1):
            signal_v = loadmat(source / f"S{person}_{tag_hz}Hz.mat")["X"].T
            recordings.append(
                _Recording(
                    subject=f"{person:02d}",
                    run=run,
                    signal_uv=signal_v * 1e6,
                    sampling_hz=LED_SAMPLING_HZ,
                    channels=LED_CHANNELS,
                    events=((0.0, signal_v.shape[1] / LED_SAMPLING_HZ, f"led_{tag_hz}hz"),),
                )
            )
    return _write_dataset(
        out,
        recordings,
        task="led",
        line_hz=50,
        hardware_filters={
            "Band-pass": {"Lower (Hz)": 0.1, "Upper (Hz)": 100},
            "Notch": {"Lower (Hz)": 48, "Upper (Hz)": 52},
        },
        name="Dataset BCI EEG SSVEP for four classes of stimuli",
        authors=["Kołodziej", "Majkowski", "Rak", "Tarnowski"],
        licence="CC-BY-ND-4.0",
        readme="Five people looked at an LED of 5, 6, 7 and 8 Hz (runs 1 to 4), 30 s each.\n"
        "The licence lets only the unmodified original be shared: do not pass on this copy.",
    )


def eyes_dataset(out: Path) -> Path:
    """Write one person's rest with eyes open (run 1) and closed (run 2) to `out`; return `out`."""
    import mne

    source = require("eegmmidb-s001") / "eegmmidb-s001"
    recordings = []
    for run, (condition, file_name) in enumerate(EYES_FILES.items(), start=1):
        with warnings.catch_warnings():
            # An annotation in the file, which is not used here, outlasts the repaired record.
            warnings.filterwarnings("ignore", "Limited 1 annotation", RuntimeWarning)
            raw = mne.io.read_raw_edf(source / file_name, verbose="warning")
        mne.datasets.eegbci.standardize(raw)  # "Fc5." is FC5
        recordings.append(
            _Recording(
                subject="001",
                run=run,
                signal_uv=raw.get_data() * 1e6,
                sampling_hz=raw.info["sfreq"],
                channels=tuple(raw.ch_names),
                events=((0.0, raw.n_times / raw.info["sfreq"], condition),),
            )
        )
    return _write_dataset(
        out,
        recordings,
        task="rest",
        line_hz=60,
        hardware_filters="n/a",
        name="EEG Motor Movement/Imagery Dataset, S001, eyes open and eyes closed",
        authors=["Schalk", "McFarland", "Hinterberger", "Birbaumer", "Wolpaw"],
        licence="ODC-By-1.0",
        readme="One person at rest, with open eyes (run 1) and closed eyes (run 2).\n"
        "The channels have their 10-10 names without the dots of the original files.\n"
        "Schalk et al. 2004, IEEE Trans Biomed Eng 51:1034; Goldberger et al. 2000,\n"
        "Circulation 101:e215.",
    )


def weeg_dataset(out: Path) -> Path:
    """Write one person's 10 s flicker trials of 6.6 and 7.5 Hz (nominal) to `out`; return `out`."""
    from scipy.io import loadmat

    source = require("weeg-vnu") / "weeg-vnu"
    recordings = []
    for run, (file_name, condition) in enumerate(FLICKER_FILES.items(), start=1):
        contents = loadmat(source / file_name, squeeze_me=True, struct_as_record=False)["ALLEEG"]
        recordings.append(
            _Recording(
                subject="01",
                run=run,
                signal_uv=contents.data.astype(float) * FLICKER_UV_PER_UNIT,
                sampling_hz=float(contents.srate),
                channels=FLICKER_CHANNELS,
                events=tuple(
                    # The file counts samples from 1.
                    ((event.latency - 1) / contents.srate, FLICKER_S, condition)
                    for event in contents.event
                    if event.type == "StimulusBegin"
                ),
            )
        )
    return _write_dataset(
        out,
        recordings,
        task="flicker",
        line_hz=50,
        hardware_filters="n/a",
        name="weeg-vnu, flicker of nominally 6.6 and 7.5 Hz",
        authors=["Quang N. Nguyen"],
        licence="MIT",
        readme="One person, 10 s of flicker and 10 s of none, four times a run.\n"
        "Runs 1 and 2 are nominally 6.6 Hz (on a display of 60 Hz truly 6.667), 3 and 4 7.5 Hz.\n"
        "The labels F3, F5 and F7 of the original are wrong: O1, Oz and O2 are stand-ins, and\n"
        "nobody knows where the electrodes sat. Nor are the units calibrated: one unit is taken\n"
        f"for {FLICKER_UV_PER_UNIT} µV, which gives a plausible EEG. Believe ratios only.\n"
        "The events stand where the markers stand; the response sets in about a second later.\n"
        "Mains of 50 Hz is assumed; the record shows nothing there, but some 60 Hz.",
    )


def _write_dataset(
    out: Path,
    recordings: list[_Recording],
    *,
    task: str,
    line_hz: int,
    hardware_filters: dict | str,
    name: str,
    authors: list[str],
    licence: str,
    readme: str,
) -> Path:
    out.mkdir(parents=True, exist_ok=True)
    _write_json(
        out / "dataset_description.json",
        {
            "Name": name,
            "BIDSVersion": "1.10.0",
            "DatasetType": "raw",
            "License": licence,
            "Authors": authors,
        },
    )
    (out / "README.md").write_text(f"# {name}\n\n{readme}\n", encoding="utf-8")
    subjects = sorted({recording.subject for recording in recordings})
    _write_table(out / "participants.tsv", ["participant_id"], [(f"sub-{s}",) for s in subjects])
    for recording in recordings:
        _write_recording(out, recording, task, line_hz, hardware_filters)
    return out


def _write_recording(
    out: Path, recording: _Recording, task: str, line_hz: int, hardware_filters: dict | str
) -> None:
    import pybv

    folder = out / f"sub-{recording.subject}" / "eeg"
    stem = f"sub-{recording.subject}_task-{task}_run-{recording.run}"
    pybv.write_brainvision(
        data=recording.signal_uv * 1e-6,
        sfreq=recording.sampling_hz,
        ch_names=list(recording.channels),
        fname_base=f"{stem}_eeg",
        folder_out=folder,
        resolution=1,
        unit="µV",
        fmt="binary_float32",
    )
    _write_json(
        folder / f"{stem}_eeg.json",
        {
            "TaskName": task,
            "SamplingFrequency": recording.sampling_hz,
            "EEGReference": "n/a",
            "PowerLineFrequency": line_hz,
            "SoftwareFilters": "n/a",
            "HardwareFilters": hardware_filters,
            "EEGChannelCount": len(recording.channels),
            "RecordingDuration": recording.signal_uv.shape[1] / recording.sampling_hz,
            "RecordingType": "continuous",
        },
    )
    _write_table(
        folder / f"{stem}_channels.tsv",
        ["name", "type", "units"],
        [(channel, "EEG", "µV") for channel in recording.channels],
    )
    _write_table(
        folder / f"{stem}_events.tsv", ["onset", "duration", "trial_type"], recording.events
    )


def _write_json(path: Path, contents: dict) -> None:
    path.write_text(json.dumps(contents, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")


def _write_table(path: Path, columns: list[str], rows: Iterable[tuple]) -> None:
    lines = ["\t".join(map(str, row)) for row in [columns, *rows]]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
