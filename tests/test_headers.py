"""Headers say what mne finds in the file; `test_bad_input.py` has the damaged ones."""

import warnings

import mne
import pytest
from onbin import headers
from realdata import require
from test_bad_input import CHANNELS, DURATION_S, FORMATS, RATE_HZ, digits, write_dataset, write_edf

READERS = {
    ".vhdr": mne.io.read_raw_brainvision,
    ".edf": mne.io.read_raw_edf,
    ".bdf": mne.io.read_raw_bdf,
}
REAL = (
    "edf-generator/test_generator.bdf",
    "edf-generator/test_generator_datarec_generator_0_5.bdf",  # records of half a second
    "edf-generator/test_generator_datarec_generator_2.bdf",
    "edf-generator/test_utf8.edf",
    "eegmmidb-s001/S001R01.edf",
    "mne-testdata/brainvision/test_old_layout_latin1_software_filter.vhdr",
    "mne-testdata/brainvision/test_units.vhdr",
    "mne-testdata/edf/test.bdf",
    "mne-testdata/edf/test_uneven_samp.edf",
)


@pytest.mark.parametrize("name", REAL)
def test_real_headers_are_read_as_mne_reads_them(name):
    path = require(name) / name
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # of what mne finds odd in its own test files
        raw = READERS[path.suffix](path, verbose="error")
    header = headers.read_header(path)
    assert header.channels == tuple(raw.ch_names)
    assert header.n_times == raw.n_times
    assert header.rate_hz == pytest.approx(raw.info["sfreq"], rel=1e-12)


@pytest.mark.parametrize("label", FORMATS)
def test_the_three_formats_hold_the_same(tmp_path, label):
    write_dataset(tmp_path / "bids")
    path = tmp_path / "bids" / f"sub-{label}" / "eeg" / f"sub-{label}_task-x_eeg{FORMATS[label]}"
    header = headers.read_header(path)
    assert header.channels == CHANNELS
    assert (header.rate_hz, header.duration_s) == (RATE_HZ, DURATION_S)
    assert header.record_s == (0 if FORMATS[label] == ".vhdr" else 1)


def test_few_line_feeds_behind_returns_are_chance(tmp_path):
    path = tmp_path / "a.eeg"
    path.write_bytes(b"\r\n" * (headers.LINE_ENDS - 1))
    headers.require_binary(path)
    path.write_bytes(b"\r\n" * headers.LINE_ENDS)
    with pytest.raises(headers.DataError, match="as if it were text"):
        headers.require_binary(path)


def test_line_ends_are_counted_across_chunks(tmp_path, monkeypatch):
    monkeypatch.setattr(headers, "CHUNK", 3)
    path = tmp_path / "a.eeg"
    path.write_bytes(b"\r\n" * 40)
    with pytest.raises(headers.DataError, match="each of 40 line feeds"):
        headers.require_binary(path)


@pytest.mark.parametrize("record_s", ["1e12", "100", "1e-6", "1e-300"])
def test_rates_of_no_amplifier_are_told(tmp_path, record_s):
    path = tmp_path / "a.edf"
    write_edf(path, digits())
    content = bytearray(path.read_bytes())
    content[244:252] = record_s.ljust(8).encode()
    path.write_bytes(content)
    with pytest.raises(headers.DataError, match=r"was recorded at .* Hz, expected 10 to 100000"):
        headers.read_header(path)
