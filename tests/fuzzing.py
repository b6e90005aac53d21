"""What the fuzz tests need: limits of time and memory, small recordings, and ways to damage them.

Run as a program (see `main`) it damages recordings and hands them to the step intake, so that a
crash or a hang costs a process of its own.
"""

import faulthandler
import json
import random
import re
import resource
import signal
import sys
import tempfile
import traceback
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import intake
import numpy as np
from onbin import layout
from onbin.dataset import read_signal
from onbin.errors import OnbinError

LONGEST_S = 10
MOST_BYTES = 1 << 30
RATE_HZ, LENGTH_S = 200, 4
CHANNELS = ("O1", "Oz", "O2", "Pz")
STEM = "sub-01/eeg/sub-01_task-x"
NUMBERS = (
    b"0", b"-1", b"1", b"7", b"255", b"65536", b"10000000", b"99999999", b"999999999999999999999",
    b"1e9", b"1e308", b"1e-300", b"-1e99", b"nan", b"inf", b"0.0000001", b"1.5", b"x", b"",
)  # fmt: skip


class TookTooLongError(BaseException):
    """A call ran on beyond the limit; not an `Exception`, so that nobody catches it on the way."""


@contextmanager
def limited(seconds: float = LONGEST_S, most_bytes: int = MOST_BYTES) -> Iterator[None]:
    """Bound the time and the further memory of what runs inside."""

    def too_long(*_: object) -> None:
        raise TookTooLongError(f"it took more than {seconds} s of the processor")

    before, hard = resource.getrlimit(resource.RLIMIT_AS)
    status = Path("/proc/self/statm")  # of Linux; elsewhere memory is not bounded
    if status.exists():
        used = int(status.read_text().split()[0]) * resource.getpagesize()
        resource.setrlimit(resource.RLIMIT_AS, (used + most_bytes, hard))
    handler = signal.signal(signal.SIGPROF, too_long)
    signal.setitimer(signal.ITIMER_PROF, seconds)  # of the processor: others may use it too
    # compiled code does not see the alarm: then the process ends and says where
    faulthandler.dump_traceback_later(12 * seconds, exit=True, file=sys.__stderr__)
    try:
        yield
    finally:
        faulthandler.cancel_dump_traceback_later()
        signal.setitimer(signal.ITIMER_PROF, 0)
        signal.signal(signal.SIGPROF, handler)
        resource.setrlimit(resource.RLIMIT_AS, (before, hard))


def outcome(call: Callable[..., Any], *args: Any, **named: Any) -> tuple[Any, str | None]:
    """Result of a call, or the plain message that it ended with; any other error goes on.

    A plain message that covers up that memory ran out is not plain: that error goes on too.
    """
    with limited():
        try:
            return call(*args, **named), None
        except OnbinError as error:
            cause: BaseException | None = error
            while cause := cause.__cause__ or cause.__context__:
                if isinstance(cause, MemoryError):
                    raise cause from None
            return None, str(error)


# --- recordings -----------------------------------------------------------------------------------


def samples_uv(n_channels: int = len(CHANNELS)) -> np.ndarray:
    """Something like EEG, shape (n_channels, n_times)."""
    return np.random.default_rng(3).normal(scale=20, size=(n_channels, RATE_HZ * LENGTH_S))


def edf(data_uv: np.ndarray, bytes_each: int = 2) -> bytes:
    """EDF (Kemp et al. 1992) in records of 1 s; with 3 bytes a sample BDF, its 24-bit kin."""
    n_channels, top = len(data_uv), 2 ** (8 * bytes_each - 1) - 1

    def fields(width: int, *values: Any) -> bytes:
        return b"".join(str(value).ljust(width)[:width].encode("latin-1") for value in values)

    start = fields(8, "0") if bytes_each == 2 else b"\xffBIOSEMI"
    head = start + fields(80, "X X X X", "Startdate X X X X") + fields(8, "01.01.01", "00.00.00")
    head += fields(8, 256 * (n_channels + 1)) + fields(44, "24BIT" * (bytes_each == 3))
    head += fields(8, LENGTH_S, 1) + fields(4, n_channels)
    head += fields(16, *CHANNELS[:n_channels]) + fields(80, *[""] * n_channels)
    for value in ("uV", -1000, 1000, -top - 1, top):
        head += fields(8, *[value] * n_channels)
    head += fields(80, *["HP:0.1Hz LP:80Hz"] * n_channels)
    head += fields(8, *[RATE_HZ] * n_channels) + fields(32, *[""] * n_channels)
    numbers = np.round(data_uv / 1000 * top).astype("<i4").reshape(n_channels, LENGTH_S, RATE_HZ)
    octets = np.ascontiguousarray(numbers.transpose(1, 0, 2)).view(np.uint8).reshape(-1, 4)
    return head + octets[:, :bytes_each].tobytes()


def brainvision(data_uv: np.ndarray) -> dict[str, bytes]:
    """The three files of BrainVision Core Data Format 1.0, by extension."""
    name = Path(STEM).name
    head = f"""Brain Vision Data Exchange Header File Version 1.0
[Common Infos]
Codepage=UTF-8
DataFile={name}_eeg.eeg
MarkerFile={name}_eeg.vmrk
DataFormat=BINARY
DataOrientation=MULTIPLEXED
NumberOfChannels={len(data_uv)}
SamplingInterval={1_000_000 // RATE_HZ}
[Binary Infos]
BinaryFormat=INT_16
[Channel Infos]
"""
    head += "".join(f"Ch{i}={n},,0.1,µV\n" for i, n in enumerate(CHANNELS[: len(data_uv)], 1))
    marks = f"""Brain Vision Data Exchange Marker File, Version 1.0
[Common Infos]
Codepage=UTF-8
DataFile={name}_eeg.eeg
[Marker Infos]
Mk1=New Segment,,1,1,0,20010101000000000000
Mk2=Stimulus,S  1,200,1,0
Mk3=Bad Interval,Bad,300,20,0
"""
    return {
        ".vhdr": head.encode(),
        ".vmrk": marks.encode(),
        ".eeg": np.round(data_uv.T * 10).astype("<i2").tobytes(),
    }


def dataset(files: dict[str, bytes], channels: bool = True) -> dict[str, bytes]:
    """Files of a dataset of one recording, by path; ``files`` are those of its data."""
    found = {
        "dataset_description.json": b'{"Name": "x", "BIDSVersion": "1.10.0"}',
        f"{STEM}_eeg.json": json.dumps(
            {
                "TaskName": "x",
                "SamplingFrequency": RATE_HZ,
                "PowerLineFrequency": 50,
                "EEGReference": "n/a",
                "SoftwareFilters": "n/a",
            }
        ).encode(),
        f"{STEM}_events.tsv": b"onset\tduration\ttrial_type\n0.5\t1.5\tleft\n2\t1.5\tright\n",
    }
    if channels:
        rows = "".join(f"{name}\tEEG\tuV\tgood\n" for name in CHANNELS)
        found[f"{STEM}_channels.tsv"] = f"name\ttype\tunits\tstatus\n{rows}".encode()
    return {f"{STEM}_eeg{extension}": data for extension, data in files.items()} | found


def small_recordings() -> dict[str, dict[str, bytes]]:
    """A valid dataset in each format."""
    data_uv = samples_uv()
    return {
        "edf": dataset({".edf": edf(data_uv)}),
        "bdf": dataset({".bdf": edf(data_uv, bytes_each=3)}),
        "brainvision": dataset(brainvision(data_uv)),
    }


def write(folder: Path, files: dict[str, bytes]) -> Path:
    """Write the files of a dataset."""
    for name, data in files.items():
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(data)
    return folder


# --- damage ---------------------------------------------------------------------------------------


def damaged(files: dict[str, bytes], seed: int) -> dict[str, bytes]:
    """Damage one or two files of a dataset in one to three places, the data files above all."""
    rng, files = random.Random(seed), dict(files)
    names = sorted(files)
    weights = [6 if "_eeg." in name and not name.endswith(".json") else 1 for name in names]
    for name in rng.choices(names, weights, k=rng.choice((1, 1, 2))):
        for _ in range(rng.choice((1, 1, 2, 3))):
            files[name] = rng.choice(DAMAGES)(rng, files[name], name.endswith((".edf", ".bdf")))
    return files


def _flipped(rng: random.Random, data: bytes, fixed: bool) -> bytes:
    changed = bytearray(data)
    for _ in range(rng.choice((1, 4, 40))):
        if changed:
            changed[_place(rng, data)] = rng.randrange(256)
    return bytes(changed)


def _cut(rng: random.Random, data: bytes, fixed: bool) -> bytes:
    return data[: _place(rng, data)]


def _taken_out(rng: random.Random, data: bytes, fixed: bool) -> bytes:
    start = _place(rng, data)
    return data[:start] + data[start + rng.choice((1, 3, 80, 1000)) :]


def _put_in(rng: random.Random, data: bytes, fixed: bool) -> bytes:
    start = _place(rng, data)
    return data[:start] + rng.randbytes(rng.choice((1, 2, 300))) + data[start:]


def _another_number(rng: random.Random, data: bytes, fixed: bool) -> bytes:
    """Put another number in the place of one in the header, of the same width where it is fixed."""
    found = list(re.finditer(rb"[-+.0-9]+ *" if fixed else rb"[-+.0-9]+", data[:4096]))
    if not found:
        return data
    start, stop = rng.choice(found).span()
    number = rng.choice(NUMBERS)
    if fixed:
        number = number.ljust(stop - start)[: stop - start]
    return data[:start] + number + data[stop:]


def _place(rng: random.Random, data: bytes) -> int:
    """Any place, as often one near the start."""
    return rng.randrange(min(len(data), rng.choice((600, 1 << 40))) or 1)


DAMAGES = (_flipped, _cut, _taken_out, _put_in, _another_number, _another_number, _another_number)


# --- the step intake ------------------------------------------------------------------------------


def take_in(folder: Path, out: Path) -> None:
    """Find the recording of a dataset and take it in, as the workflow does."""
    recording = layout.find_recordings(folder)[0]
    layout.check_files([recording])
    signal = out / "a_eeg.fif"
    settings = {
        "folder": str(folder),
        "recording": recording.name,
        "extension": recording.extension,
        "flicker": {"photodiode": None},
        "filter": {"line_hz": None},
        "least_rate_hz": 100.0,
        "conditions": {"left": {"events": {"trial_type": "left"}, "duration_s": None}},
    }
    intake.intake(
        SimpleNamespace(files=list(recording.files)),
        SimpleNamespace(
            signal=signal,
            trials=out / "a_trials.tsv",
            channels=out / "a_channels.tsv",
            recording=out / "a_recording.tsv",
        ),
        settings,
    )
    taken_in = read_signal(signal).get_data()
    assert taken_in.size
    assert np.isfinite(taken_in).all(), "what is no number was taken in"


def main(base: str, first: int, last: int) -> None:
    """Take in a dataset damaged in many ways; print a line of JSON for each: seed, kind, text."""
    files = {
        path.relative_to(base).as_posix(): path.read_bytes()
        for path in sorted(Path(base).rglob("*"))
        if path.is_file()
    }
    for seed in range(first, last):
        with tempfile.TemporaryDirectory() as place:
            folder, out = write(Path(place) / "data", damaged(files, seed)), Path(place) / "out"
            out.mkdir()
            print(json.dumps([seed, "started", ""]), flush=True)
            try:
                _, told = outcome(take_in, folder, out)
                said = ["taken in", ""] if told is None else ["refused", told]
            except (Exception, TookTooLongError):
                said = ["broke", traceback.format_exc()]
            print(json.dumps([seed, *said]), flush=True)


if __name__ == "__main__":
    main(sys.argv[1], int(sys.argv[2]), int(sys.argv[3]))
