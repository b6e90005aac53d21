"""A long recording with many channels at a high rate, written record by record.

    python tests/large_recording.py FOLDER [--minutes 60] [--channels 64] [--rate 2048]

FOLDER becomes a BIDS dataset of one person: noise, alpha, a response at 15 Hz, blinks and hum.
"""

import argparse
import json
from pathlib import Path

import numpy as np

LSB_UV = 0.03125  # of the BDF: 1/32 µV, as amplifiers that write it have (common practice)
TRIAL_S, BREAK_S = 10, 2
BASE_S = 61  # the noise repeats after so long, out of step with everything else


def write_dataset(folder: Path, minutes: float = 60, n_channels: int = 64, rate_hz: int = 2048):
    """Write the dataset."""
    import mne

    montage = mne.channels.make_standard_montage("biosemi64")
    names = montage.ch_names[:n_channels]
    place = folder / "sub-01" / "eeg"
    place.mkdir(parents=True)
    seconds = round(minutes * 60)
    write_bdf(place / "sub-01_task-long_eeg.bdf", names, seconds, rate_hz)
    about = {"TaskName": "long", "SamplingFrequency": rate_hz, "PowerLineFrequency": 50}
    about |= {"EEGReference": "CMS/DRL", "SoftwareFilters": "n/a", "RecordingDuration": seconds}
    (place / "sub-01_task-long_eeg.json").write_text(json.dumps(about))
    rows = [f"{name}\tEEG\tuV\tgood\n" for name in names]
    (place / "sub-01_task-long_channels.tsv").write_text(
        "name\ttype\tunits\tstatus\n" + "".join(rows)
    )
    onsets = range(5, seconds - TRIAL_S, TRIAL_S + BREAK_S)
    events = [
        f"{onset}\t{TRIAL_S}\t{'watch' if index % 2 else 'rest'}\n"
        for index, onset in enumerate(onsets)
    ]
    (place / "sub-01_task-long_events.tsv").write_text(
        "onset\tduration\ttrial_type\n" + "".join(events)
    )
    (folder / "dataset_description.json").write_text(
        json.dumps({"Name": "long", "BIDSVersion": "1.10.0"})
    )


def write_bdf(path: Path, names: list[str], seconds: int, rate_hz: int):
    """Write a BDF with records of 1 s."""
    n_channels = len(names)
    full_uv = 2**23 * LSB_UV

    def cells(texts, width):
        return "".join(f"{text:<{width}}" for text in texts).encode("latin-1")

    header = b"\xffBIOSEMI" + cells(["X", "X"], 80) + b"01.01.2300.00.00"
    header += cells([256 * (n_channels + 1)], 8) + cells(["24BIT"], 44)
    header += cells([seconds, 1], 8) + cells([n_channels], 4)
    for texts, width in (
        (names, 16), ([""] * n_channels, 80), (["uV"] * n_channels, 8),
        ([f"{-full_uv:.0f}"] * n_channels, 8), ([f"{full_uv - LSB_UV:.0f}"] * n_channels, 8),
        ([-(2**23)] * n_channels, 8), ([2**23 - 1] * n_channels, 8), ([""] * n_channels, 80),
        ([rate_hz] * n_channels, 8), ([""] * n_channels, 32),
    ):  # fmt: skip
        header += cells(texts, width)
    rng = np.random.default_rng(1)
    noise_uv = rng.normal(size=(n_channels, BASE_S * rate_hz), scale=3).astype(np.float32)
    slow_uv = np.cumsum(rng.normal(size=noise_uv.shape, scale=0.35), axis=1).astype(np.float32)
    slow_uv -= np.linspace(0, 1, slow_uv.shape[1]) * slow_uv[:, -1:]  # begins where it ends
    mixing = rng.normal(size=(n_channels, n_channels)).astype(np.float32) / np.sqrt(n_channels)
    noise_uv += mixing @ slow_uv
    back = np.linspace(0, 1, n_channels)[:, None]  # names go from the front to the back
    with open(path, "wb") as file:
        file.write(header)
        for second in range(seconds):
            time_s = second + np.arange(rate_hz) / rate_hz
            start = second % BASE_S * rate_hz
            signal_uv = noise_uv[:, start : start + rate_hz].copy()
            signal_uv += back * 10 * np.sin(2 * np.pi * 10.3 * time_s) * np.sin(0.7 * time_s)
            signal_uv += back**2 * 2 * np.cos(2 * np.pi * 15 * time_s)
            signal_uv += 3 * np.cos(2 * np.pi * 50 * time_s)
            if second % 4 == 1:
                signal_uv += (1 - back) ** 4 * 150 * np.hanning(rate_hz)
            counts = np.round(signal_uv / LSB_UV).astype("<i4")
            file.write(counts.reshape(n_channels, rate_hz, 1).view("u1")[..., :3].tobytes())


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("folder", type=Path)
    parser.add_argument("--minutes", type=float, default=60)
    parser.add_argument("--channels", type=int, default=64)
    parser.add_argument("--rate", type=int, default=2048)
    chosen = parser.parse_args()
    write_dataset(chosen.folder, chosen.minutes, chosen.channels, chosen.rate)
