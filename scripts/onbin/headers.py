"""What a recording's data file says of itself, and whether the file keeps to it.

Readers take a damaged file as far as it goes and do not tell. So headers are read here first.
"""

import logging
import math
import os
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path

from onbin.errors import DataError

log = logging.getLogger("onbin")

ANNOTATIONS = ("EDF Annotations", "BDF Annotations")  # not signals (EDF+, Kemp and Olivan 2003)
SAMPLE_BYTES = {"INT_16": 2, "INT_32": 4, "IEEE_FLOAT_32": 4, "IEEE_FLOAT_64": 8}
LINE_ENDS = 16  # so many line feeds, each behind a carriage return, are no chance
CHUNK = 1 << 24
RATE_HZ = (10, 100_000)  # what amplifiers record at; beyond it a header is damaged
AGAIN = "Copy the recording anew, in binary mode, or leave it out."


@dataclass(frozen=True)
class Header:
    """What a data file holds.

    Attributes
    ----------
    path : Path
    channels : tuple of str
    rate_hz : float
    n_times : int
    record_s : float
        Length of a data record, to which a duration may have been rounded; 0 if there are none.
    """

    path: Path
    channels: tuple[str, ...]
    rate_hz: float
    n_times: int
    record_s: float = 0.0

    @property
    def duration_s(self) -> float:
        """Length of the recording."""
        return self.n_times / self.rate_hz


def require_files(files: Iterable[str]) -> None:
    """See that every file can be read and holds something.

    Raises
    ------
    DataError
        If one cannot be.
    """
    for file in files:
        try:
            with open(file, "rb") as opened:
                start = opened.read(16)
        except OSError as error:
            raise DataError(
                f"{file} cannot be read ({error.strerror}); check that it is there, is a file, and "
                "that you have the right to read it."
            ) from None
        if not start:
            raise DataError(f"{file} is empty, 0 bytes. Copy it anew, or leave the recording out.")
        if start.startswith(b"/annex/objects/"):
            raise DataError(
                f"{file}: the content was not fetched, only a note of its place is there. Fetch it "
                "with `datalad get` or `git annex get`, or leave the recording out."
            )


def read_header(path: str | Path) -> Header:
    """Read the header of a data file, and compare it with the file.

    Raises
    ------
    DataError
        If the header cannot be, the file holds less or more than it says, or no amplifier records
        at such a rate.
    """
    path = Path(path)
    readers: dict[str, Callable[[Path], Header]] = {
        ".vhdr": _brainvision,
        ".edf": _edf,
        ".bdf": _edf,
        ".set": _eeglab,
    }
    header = readers[path.suffix](path)
    low_hz, high_hz = RATE_HZ
    if not low_hz <= header.rate_hz <= high_hz:
        raise DataError(
            f"{path} says that it was recorded at {header.rate_hz:g} Hz, expected {low_hz} to "
            f"{high_hz}; its header may be damaged. {AGAIN}"
        )
    return header


def _brainvision(path: Path) -> Header:
    content = path.read_bytes()
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = content.decode("latin-1")
    sections: dict[str, dict[str, str]] = {}
    section: dict[str, str] = {}
    for line in text.splitlines():
        if line.startswith("["):
            section = sections.setdefault(line.strip().strip("[]"), {})
        elif "=" in line and not line.startswith(";"):
            key, value = line.split("=", 1)
            section[key.strip()] = value.strip()
    common, listed = sections.get("Common Infos", {}), sections.get("Channel Infos", {})
    for key in ("DataFile", "NumberOfChannels", "SamplingInterval"):
        if key not in common:
            raise DataError(f"{path} has no {key}, which a BrainVision header must have. {AGAIN}")
    n_channels = _number(path, "NumberOfChannels", common["NumberOfChannels"], whole=True)
    interval_us = _number(path, "SamplingInterval", common["SamplingInterval"])
    names = []
    for value in listed.values():
        name, _, resolution, *_ = [*value.split(","), "", ""]  # name, reference, resolution, unit
        _number(path, f"the resolution of {name}", resolution or "1", least=-math.inf)
        names.append(name.replace("\\1", ","))
    if len(names) != n_channels:
        raise DataError(
            f"{path}: NumberOfChannels is {n_channels:g}, but {len(names)} channels are listed "
            f"(Ch1=...). {AGAIN}"
        )
    for key in ("DataFile", "MarkerFile"):
        named = common.get(key, "").replace("$b", path.stem)
        if named and not (path.parent / named).is_file():
            raise DataError(
                f"{path}: {key} is {named}, which is not beside it. Put it there, or correct the "
                "header if the file was renamed."
            )
    data = path.parent / common["DataFile"].replace("$b", path.stem)
    require_files([str(data)])
    rate_hz = 1e6 / interval_us
    if common.get("DataFormat", "BINARY").upper() != "BINARY":
        raise DataError(
            f"{path}: DataFormat is {common['DataFormat']}, expected BINARY. Export the recording "
            "anew."
        )
    kind = sections.get("Binary Infos", {}).get("BinaryFormat", "INT_16").upper()
    if kind not in SAMPLE_BYTES:
        raise DataError(
            f"{path}: BinaryFormat is {kind}, expected one of {', '.join(SAMPLE_BYTES)}. Export "
            "the recording anew."
        )
    frame = int(n_channels) * SAMPLE_BYTES[kind]
    size = data.stat().st_size
    require_binary(data)
    if size % frame:
        raise DataError(
            f"{data}: {size} bytes are no whole number of samples of {n_channels:g} channels "
            f"({frame} bytes each); the file was cut or changed, or the header is another's. "
            f"{AGAIN}"
        )
    return Header(path, tuple(names), rate_hz, size // frame)


def _edf(path: Path) -> Header:
    """Read a header of EDF (Kemp et al. 1992), EDF+ or BDF."""
    sample_bytes = 3 if path.suffix == ".bdf" else 2
    size = path.stat().st_size
    with open(path, "rb") as file:
        first = file.read(256)
        expected = b"\xffBIOSEMI" if path.suffix == ".bdf" else b"0       "
        if not first.startswith(expected):
            raise DataError(
                f"{path} does not begin as a file of {path.suffix[1:].upper()} does: found "
                f"{first[:8].decode('latin-1')!r}, expected {expected.decode('latin-1')!r}. {AGAIN}"
            )
        text = first.decode("latin-1")
        n_signals = int(_number(path, "the number of signals", text[252:256], whole=True))
        header_bytes = _number(path, "the number of header bytes", text[184:192], whole=True)
        record_s = _number(path, "the duration of a data record", text[244:252])
        n_records = _number(path, "the number of data records", text[236:244], whole=True, least=-1)
        if header_bytes != 256 * (n_signals + 1) or size < header_bytes:
            raise DataError(
                f"{path}: {n_signals} signals make a header of {256 * (n_signals + 1)} bytes; the "
                f"header says {header_bytes:g}, and the whole file has {size}. {AGAIN}"
            )
        signals = file.read(256 * n_signals).decode("latin-1")
    if text[192:197] in ("EDF+D", "BDF+D"):
        raise DataError(
            f"{path} is interrupted ({text[192:197]}), so that times of events do not fit its "
            "samples. Export it as one continuous recording, or leave it out."
        )
    names = [signals[16 * i : 16 * (i + 1)].strip() for i in range(n_signals)]
    for first, second in ((104, 112), (120, 128)):  # physical and digital minimum and maximum
        for i, name in enumerate(names):
            low, high = (
                _number(path, f"a limit of {name}", text, least=-math.inf, zero=True)
                for text in (signals[n_signals * at + 8 * i :][:8] for at in (first, second))
            )
            if low == high:
                raise DataError(
                    f"{path}: the lower and the upper limit of {name} are both {low:g}. {AGAIN}"
                )
    counts = [
        int(_number(path, f"samples a record of {name}", signals[start : start + 8], whole=True))
        for name, start in zip(names, range(216 * n_signals, 224 * n_signals, 8), strict=True)
    ]
    channels = [i for i, name in enumerate(names) if name not in ANNOTATIONS]
    if not channels:
        raise DataError(f"{path} has no signal but annotations. {AGAIN}")
    require_binary(path, int(header_bytes))
    record_bytes = sum(counts) * sample_bytes
    there, over = divmod(size - int(header_bytes), record_bytes)
    if n_records == -1:
        log.warning("%s does not say how many data records it has; it was not closed", path)
        says = "does not say how many data records it has"
        n_records = max(there, 1)
    else:
        says = f"says {n_records:g} data records, {n_records * record_s:g} s"
    if (there, over) != (n_records, 0):
        raise DataError(
            f"{path}: the header {says}; the file has {there} of {record_bytes} bytes, "
            f"{there * record_s:g} s, and {over} bytes more: it was cut or changed. {AGAIN}"
        )
    per_record = max(counts[i] for i in channels)
    return Header(
        path,
        tuple(names[i] for i in channels),
        per_record / record_s,
        there * per_record,
        record_s,
    )


def _eeglab(path: Path) -> Header:
    """Have mne read it: the format is MATLAB's."""
    import warnings

    import mne

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            raw = mne.io.read_raw_eeglab(path, verbose="error")
    except Exception as error:  # whatever a damaged file leads the reader to
        log.error("the reader says: %s: %s", type(error).__name__, error)
        raise DataError(
            f"{path} cannot be read, or the .fdt beside it; the log tells what the reader says. "
            f"{AGAIN}"
        ) from error
    data = Path(raw.filenames[0])
    expected = 4 * len(raw.ch_names) * raw.n_times  # .fdt holds single precision
    if data.suffix == ".fdt" and data.stat().st_size != expected:
        raise DataError(
            f"{data}: {path.name} says {raw.n_times / raw.info['sfreq']:g} s, {expected} bytes; "
            f"the file has {data.stat().st_size}. {AGAIN}"
        )
    return Header(path, tuple(raw.ch_names), raw.info["sfreq"], raw.n_times)


def _number(
    path: Path, what: str, text: str, whole: bool = False, least: float = 0.0, zero: bool = False
) -> float:
    """Number of a header; above 0, or below it down to ``least``, and 0 itself if ``zero``."""
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    usable = math.isfinite(value) and (value > 0 or least <= value < 0 or (zero and value == 0))
    if not usable or (whole and value != int(value)):
        kind = "a whole number" if whole else "a number"
        limit = " above 0" if least == 0 else "" if zero else " other than 0"
        raise DataError(f"{path}: {what} is {text.strip()!r}, expected {kind}{limit}. {AGAIN}")
    return value


def require_binary(path: Path, start: int = 0) -> None:
    """See that a file was not sent as text, with a carriage return put before every line feed.

    Raises
    ------
    DataError
        If each of many has one.
    """
    feeds, pairs, before = 0, 0, b""
    with open(path, "rb") as file:
        file.seek(start, os.SEEK_SET)
        while chunk := file.read(CHUNK):
            feeds += chunk.count(b"\n")
            pairs += (before + chunk).count(b"\r\n")
            before = chunk[-1:]
            if pairs < feeds:
                return
    if feeds >= LINE_ENDS:
        raise DataError(
            f"{path}: each of {feeds} line feeds stands behind a carriage return. The file was "
            f"copied as if it were text, which changes its samples. {AGAIN}"
        )
