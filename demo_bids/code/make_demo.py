"""Make the demo dataset: a BIDS EEG study of frequency tagging whose truth is known.

    python demo_bids/code/make_demo.py [--out DIR] [--people N] [--trials N] [--artifacts on|off]

Without options this remakes every byte of the dataset in which the program lies (with the
same numpy and mne). `demo_signals.py` says what the people's EEG is made of.
"""

import argparse
import json
from pathlib import Path

import numpy as np
from demo_signals import (
    ALPHA_PER_G,
    CHANNELS,
    FRAMES,
    NOMINAL_REFRESH_HZ,
    PEOPLE,
    RATE_HZ,
    REFERENCE,
    RESPONSE_PER_G,
    REST_S,
    TRIAL_S,
    Block,
    Person,
    Recording,
    electrodes,
    simulate,
)

TASK = "panels"
RESOLUTION_UV = 0.1
TRIALS = 20
MARKER_CODES = {"rest_open": 1, "rest_closed": 2, "watch_left": 11, "watch_right": 12}
TRUTH = "sourcedata/truth"

README = f"""\
# Two panels: a simulated frequency-tagging study

Nobody was recorded: the people are invented and their EEG is computed. The dataset serves to try
out and to test an analysis whose right answer is known.

The scene is a control room. Each person rests with eyes open and with eyes closed, {REST_S:g} s
each, and then watches one of two instrument panels, the left or the right, in trials of
{TRIAL_S:g} s. Both panels flicker throughout each trial on a display of {NOMINAL_REFRESH_HZ:g} Hz:

| panel | frames a cycle | tag |
| --- | --- | --- |
| left | {FRAMES["left"]} | {NOMINAL_REFRESH_HZ / FRAMES["left"]:g} Hz |
| right | {FRAMES["right"]} | {NOMINAL_REFRESH_HZ / FRAMES["right"]:g} Hz |

The flicker starts anew, with the same phase, at each onset in `events.tsv`.

As in any study, not all went well: people blink and clench their jaws, some channels are bad, one
person moved, one display did not run at its nominal rate, some markers were lost. The folder
`{TRUTH}` tells which, and what was planted. Read it after your analysis, not before.

`python code/make_demo.py` makes all of it again from one seed.

Flicker of this kind can harm photosensitive people.
"""

TRUTH_README = f"""\
# What was planted

One JSON file a person. Lists of numbers by channel follow `channels`. Signals are those of the
recorded reference; amplitudes are peak amplitudes of sinusoids (A in A cos(2πft + φ)).

- `channels`, `reference`: the order of all lists below, and the reference that they are against.
- `refresh_hz`: what the display really ran at.
- `watched_factor`: by how much watching a panel multiplies its tag's terms.
- `response`: for each term its `frequency_hz`, and for each condition `amplitude_uv` and
  `phase_rad` by channel. 0 rad is the peak of a cosine at the trial's onset. `left_h1` is the first
  harmonic of the left panel, `left_h2` its second; `sum` and `difference` are the intermodulation
  at f_right + f_left and f_right - f_left. The values are exact means over those trials of the
  condition that `events.tsv` lists. Within a trial the response is a stationary sinusoid from onset
  to offset, at phase 0 of the flicker at onset.
- `alpha`: `frequency_hz` and `width_hz` (full width at half maximum of its Gaussian spectrum),
  `topography` (µV by channel, real, for a rhythm of 1 µV in the occipital region) and
  `region_power_uv2`, the mean square of this very rhythm in the occipital region during each
  condition, without the background.
- `trials`: all of them, with `onset_s`, `condition`, the latent `g`, and `marked` (false where the
  marker was lost). In a trial the response is multiplied by 1 + {RESPONSE_PER_G:g} g and the alpha
  amplitude by exp(-{ALPHA_PER_G:g} g), so that alpha falls where the response rises. g is constant
  within a trial and averages to 0 over the marked trials of each condition.
- `artifacts`: `bad_channels` (`name`, `kind`, whether `marked` in channels.tsv), `blink_peaks_s`,
  `muscle_bursts`, `movements`, `mains_hz`. Absent from a dataset made with `--artifacts off`.

The occipital region is the mean of O1, Oz and O2 after average reference over the 24 channels.
Neither age, sex nor shift has any influence on what was planted.
"""

DESCRIPTION = {
    "Name": "Two panels: a simulated frequency-tagging EEG study",
    "BIDSVersion": "1.10.0",
    "DatasetType": "raw",
    "License": "BSD-3-Clause",
    "Authors": ["the onbin developers"],
    "HowToAcknowledge": "Simulated data; no acknowledgement needed.",
    "EthicsApprovals": ["Not needed: no person was recorded."],
    "GeneratedBy": [
        {"Name": "make_demo", "Description": "code/make_demo.py simulates the dataset from a seed."}
    ],
}

PARTICIPANTS_SIDECAR = {
    "age": {"Description": "Age of the invented person", "Units": "year"},
    "sex": {"Description": "Sex of the invented person", "Levels": {"F": "female", "M": "male"}},
    "shift": {
        "Description": "Shift worked on the day before the recording",
        "Levels": {"day": "day shift", "night": "night shift"},
    },
}

EVENTS_SIDECAR = {
    "onset": {"Description": "Onset, from the first sample", "Units": "s"},
    "duration": {"Description": "Duration", "Units": "s"},
    "trial_type": {
        "Description": "What the person did",
        "Levels": {
            "rest_open": "Rest with eyes open, screen grey",
            "rest_closed": "Rest with eyes closed, screen grey",
            "watch_left": "Both panels flicker, the person watches the left one",
            "watch_right": "Both panels flicker, the person watches the right one",
        },
    },
    "StimulusPresentation": {
        "ScreenDistance": 0.7,
        "ScreenOrigin": ["top", "left"],
        "ScreenRefreshRate": NOMINAL_REFRESH_HZ,
        "ScreenResolution": [2560, 1440],
        "ScreenSize": [0.597, 0.336],
        "SoftwareName": "none: simulated",
    },
}

COORDSYSTEM = {
    "EEGCoordinateSystem": "CapTrak",
    "EEGCoordinateUnits": "m",
    "EEGCoordinateSystemDescription": (
        "X right through the right preauricular point, Y front through the nasion, Z up; the "
        "origin lies between the preauricular points. A template cap on a sphere of 95 mm."
    ),
}


def eeg_sidecar(recording: Recording) -> dict:
    """Return the metadata of one recording."""
    return {
        "TaskName": TASK,
        "TaskDescription": "Rest with eyes open and closed, then watching one of two flickering "
        "panels.",
        "Instructions": "Watch the panel that the arrow pointed to. Blink as little as you can.",
        "InstitutionName": "none: simulated",
        "Manufacturer": "none: simulated",
        "ManufacturersModelName": "n/a",
        "SoftwareVersions": "n/a",
        "DeviceSerialNumber": "n/a",
        "CapManufacturer": "none: simulated",
        "CapManufacturersModelName": "n/a",
        "EEGPlacementScheme": "10-10",
        "EEGReference": REFERENCE,
        "EEGGround": "n/a",
        "SamplingFrequency": RATE_HZ,
        "PowerLineFrequency": 50,
        "SoftwareFilters": "n/a",
        "HardwareFilters": "n/a",
        "RecordingType": "continuous",
        "RecordingDuration": recording.signal_uv.shape[1] / RATE_HZ,
        "EEGChannelCount": len(CHANNELS),
        "EOGChannelCount": 0,
        "ECGChannelCount": 0,
        "EMGChannelCount": 0,
        "MISCChannelCount": 0,
        "TriggerChannelCount": 0,
    }


# --- text -----------------------------------------------------------------------------------------


def plain(value: object, decimals: int = 4) -> object:
    """Return a value as plain JSON types, its numbers rounded."""
    if isinstance(value, dict):
        return {key: plain(item, decimals) for key, item in value.items()}
    if isinstance(value, list | tuple | np.ndarray):
        return [plain(item, decimals) for item in value]
    return round(float(value), decimals) if isinstance(value, float) else value


def json_text(value: object) -> str:
    """Return a value as indented JSON, with every innermost list of numbers on one line."""
    encoder = json.JSONEncoder(ensure_ascii=False)

    def lines(item: object, indent: str) -> str:
        deeper = indent + "  "
        if isinstance(item, dict) and item:
            rows = [f"{deeper}{encoder.encode(k)}: {lines(v, deeper)}" for k, v in item.items()]
            return "{\n" + ",\n".join(rows) + f"\n{indent}}}"
        if isinstance(item, list) and any(isinstance(entry, dict) for entry in item):
            rows = [f"{deeper}{encoder.encode(entry)}" for entry in item]
            return "[\n" + ",\n".join(rows) + f"\n{indent}]"
        return encoder.encode(item)

    return lines(item=value, indent="") + "\n"


def tsv_text(header: tuple[str, ...], rows: list[tuple]) -> str:
    """Return a table as tab-separated text."""
    return "".join("\t".join(str(cell) for cell in row) + "\n" for row in [header, *rows])


def events_text(blocks: list[Block]) -> str:
    """Return the events that kept their markers."""
    rows = [
        (f"{block.onset_s:.3f}", f"{block.duration_s:.3f}", block.kind)
        for block in blocks
        if block.marked
    ]
    return tsv_text(("onset", "duration", "trial_type"), rows)


def channels_text(marked_bad: tuple[str, ...]) -> str:
    """Return the table of channels."""
    rows = [
        (name, "EEG", "µV", RATE_HZ, REFERENCE)
        + (("bad", "no signal") if name in marked_bad else ("good", "n/a"))
        for name in CHANNELS
    ]
    header = ("name", "type", "units", "sampling_frequency", "reference")
    return tsv_text((*header, "status", "status_description"), rows)


def electrodes_text() -> str:
    """Return the table of electrodes, with the reference last."""
    positions, _ = electrodes()
    rows = [
        (name, *(f"{value:.5f}" for value in positions[name])) for name in (*CHANNELS, REFERENCE)
    ]
    return tsv_text(("name", "x", "y", "z"), rows)


def coordsystem() -> dict:
    """Return the coordinate system with its anatomical landmarks."""
    positions, _ = electrodes()
    return COORDSYSTEM | {
        "AnatomicalLandmarkCoordinates": {
            name: (positions[name].round(5) + 0.0).tolist() for name in ("NAS", "LPA", "RPA")
        },
        "AnatomicalLandmarkCoordinateSystem": "CapTrak",
        "AnatomicalLandmarkCoordinateUnits": "m",
    }


# --- BrainVision ----------------------------------------------------------------------------------


def header_text(stem: str) -> str:
    """Return the BrainVision header of a recording."""
    channels = "".join(
        f"Ch{i}={name},{REFERENCE},{RESOLUTION_UV},µV\n" for i, name in enumerate(CHANNELS, 1)
    )
    return (
        "Brain Vision Data Exchange Header File Version 1.0\n\n"
        "[Common Infos]\n"
        "Codepage=UTF-8\n"
        f"DataFile={stem}.eeg\n"
        f"MarkerFile={stem}.vmrk\n"
        "DataFormat=BINARY\n"
        "DataOrientation=MULTIPLEXED\n"
        f"NumberOfChannels={len(CHANNELS)}\n"
        f"SamplingInterval={1_000_000 // RATE_HZ}\n\n"
        "[Binary Infos]\n"
        "BinaryFormat=INT_16\n\n"
        "[Channel Infos]\n"
        f"{channels}"
    )


def markers_text(stem: str, blocks: list[Block]) -> str:
    """Return the BrainVision markers of a recording: the same as the events, counted from 1."""
    marked = [block for block in blocks if block.marked]
    markers = "".join(
        f"Mk{i}=Stimulus,S{MARKER_CODES[block.kind]:3d},{block.start + 1},1,0\n"
        for i, block in enumerate(marked, 2)
    )
    return (
        "Brain Vision Data Exchange Marker File Version 1.0\n\n"
        "[Common Infos]\n"
        "Codepage=UTF-8\n"
        f"DataFile={stem}.eeg\n\n"
        "[Marker Infos]\n"
        "Mk1=New Segment,,1,1,0\n"
        f"{markers}"
    )


def counts(signal_uv: np.ndarray) -> np.ndarray:
    """Return a signal as 16-bit counts, shape (n_times, n_channels), little-endian.

    Raises
    ------
    ValueError
        When the signal does not fit, so that nothing is clipped.
    """
    scaled = np.round(signal_uv.T / RESOLUTION_UV)
    if abs(scaled).max() > np.iinfo(np.int16).max:
        raise ValueError(f"{abs(signal_uv).max():.0f} µV do not fit into 16 bits")
    return scaled.astype("<i2")


# --- files ----------------------------------------------------------------------------------------


def write(path: Path, content: str | bytes) -> None:
    """Write a file, and the folders that it needs."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(content.encode() if isinstance(content, str) else content)


def write_study(root: Path, people: tuple[Person, ...]) -> None:
    """Write what stands at the root of the dataset."""
    rows = [(f"sub-{p.label}", p.age, p.sex, p.shift) for p in people]
    write(root / "README.md", README)
    write(root / "dataset_description.json", json_text(DESCRIPTION))
    write(root / "participants.tsv", tsv_text(("participant_id", "age", "sex", "shift"), rows))
    write(root / "participants.json", json_text(PARTICIPANTS_SIDECAR))
    write(root / f"task-{TASK}_events.json", json_text(EVENTS_SIDECAR))
    write(root / TRUTH / "README.md", TRUTH_README)


def write_recording(
    root: Path, person: Person, recording: Recording, with_artifacts: bool = True
) -> None:
    """Write one person's recording and its truth."""
    folder = root / f"sub-{person.label}" / "eeg"
    stem = f"sub-{person.label}_task-{TASK}"
    space = f"sub-{person.label}_space-CapTrak"
    write(folder / f"{stem}_eeg.vhdr", header_text(f"{stem}_eeg"))
    write(folder / f"{stem}_eeg.vmrk", markers_text(f"{stem}_eeg", recording.blocks))
    write(folder / f"{stem}_eeg.eeg", counts(recording.signal_uv).tobytes())
    write(folder / f"{stem}_eeg.json", json_text(eeg_sidecar(recording)))
    write(folder / f"{stem}_events.tsv", events_text(recording.blocks))
    write(
        folder / f"{stem}_channels.tsv", channels_text(person.marked_bad if with_artifacts else ())
    )
    write(folder / f"{space}_electrodes.tsv", electrodes_text())
    write(folder / f"{space}_coordsystem.json", json_text(coordsystem()))
    write(root / TRUTH / f"sub-{person.label}.json", json_text(plain(recording.truth)))


def make_dataset(
    root: Path, n_people: int = len(PEOPLE), n_trials: int = TRIALS, with_artifacts: bool = True
) -> None:
    """Make the dataset, or a smaller one of its first people.

    Parameters
    ----------
    root : Path
        Where to; files of the same names are replaced.
    n_people : int
        How many of the people.
    n_trials : int
        Trials a person.
    with_artifacts : bool
        False for the same brains without eyes, muscles, movement, mains and bad channels.

    Raises
    ------
    ValueError
        When ``root`` holds people who would not be replaced.
    """
    people = PEOPLE[:n_people]
    others = {path.name for path in root.glob("sub-*")} - {f"sub-{p.label}" for p in people}
    if others:
        raise ValueError(
            f"{root} already holds {', '.join(sorted(others))}, who are not among the people to "
            "make. Give an empty folder with --out."
        )
    write_study(root, people)
    for person in people:
        write_recording(root, person, simulate(person, n_trials, with_artifacts), with_artifacts)


def main() -> None:
    """Read the command line and make the dataset."""
    parser = argparse.ArgumentParser(description="Make the demo dataset.")
    parser.add_argument("--out", type=Path, default=Path(__file__).resolve().parents[1])
    parser.add_argument(
        "--people", type=int, default=len(PEOPLE), choices=range(1, len(PEOPLE) + 1)
    )
    parser.add_argument("--trials", type=int, default=TRIALS, help="trials a person, at least 2")
    parser.add_argument("--artifacts", choices=["on", "off"], default="on")
    options = parser.parse_args()
    if options.trials < 2:
        parser.error(f"--trials {options.trials}: give at least 2, one for each panel")
    try:
        make_dataset(options.out, options.people, options.trials, options.artifacts == "on")
    except ValueError as error:
        parser.error(str(error))


if __name__ == "__main__":
    main()
