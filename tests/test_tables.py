"""Tables are written and read back as they were; strangers' tables are read with care."""

import math

import numpy as np
import pytest
from onbin import tables
from onbin.errors import DataError

COLUMNS = ["participant", "windows", "amplitude_uv", "present", "reason"]


@pytest.fixture
def path(tmp_path):
    return tmp_path / "table.tsv"


def test_round_trip(path):
    rows = [
        {"participant": "sub-1", "windows": 12, "amplitude_uv": 0.25, "present": True},
        {"participant": "µ, ×", "windows": np.int64(0), "amplitude_uv": np.float32(1.5)},
        {"windows": None, "amplitude_uv": math.nan, "present": np.False_, "reason": ""},
        {"amplitude_uv": -math.inf, "reason": 'said "no"'},
    ]
    tables.write_table(path, rows, COLUMNS)
    first, second, third, fourth = tables.read_table(path)
    assert first == rows[0] | {"reason": None}
    assert second == rows[1] | {"present": None, "reason": None}
    assert math.isnan(third.pop("amplitude_uv"))
    assert third == {"participant": None, "windows": None, "present": False, "reason": None}
    assert (fourth["amplitude_uv"], fourth["reason"]) == (-math.inf, rows[3]["reason"])
    assert tables.header(path) == COLUMNS
    assert path.read_text(encoding="utf-8").splitlines()[1] == "sub-1\t12\t0.25\ttrue\tn/a"


def test_a_number_keeps_ten_digits(path):
    tables.write_table(path, [{"amplitude_uv": 120 / 7e6}], ["amplitude_uv"])
    # ten significant digits are printed, so half a unit of the tenth may be lost
    assert tables.read_table(path)[0]["amplitude_uv"] == pytest.approx(120 / 7e6, rel=5e-10)


@pytest.mark.parametrize("text", ["=1+1", "+A1", "-A1", "@cmd"])
def test_a_cell_is_no_formula_and_is_read_as_it_was(path, text):
    """What a spreadsheet runs (OWASP, CSV injection) gets an apostrophe before it."""
    tables.write_table(path, [{"name": text, "amplitude_uv": -1.0}], ["name", "amplitude_uv"])
    assert path.read_text().splitlines()[1] == f"'{text}\t-1"  # a negative number is none
    assert tables.read_table(path)[0]["name"] == text


def test_a_cell_is_one_line_without_tabs(path):
    """What BIDS asks of tabular files, and what a reader by lines and tabs needs."""
    tables.write_table(path, [{"name": "a\tb\r\nc", "reason": "\t=1"}], ["name", "reason"])
    assert path.read_bytes() == b"name\treason\na b  c\t =1\n"


def test_an_apostrophe_elsewhere_stays(path):
    tables.write_table(path, [{"name": "'tis"}], ["name"])
    assert tables.read_table(path)[0]["name"] == "'tis"


def test_what_is_not_described_is_not_written(path):
    with pytest.raises(KeyError, match="mystery"):
        tables.write_table(path, [], ["participant", "mystery"])
    assert not path.exists()
    with pytest.raises(TypeError, match="cannot hold"):
        tables.write_table(path, [{"reason": ["a", "b"]}], ["reason"])


def test_foreign_line_ends_mark_blank_lines_and_spaces(path):
    path.write_bytes("\ufeffonset\t trial_type\r\n1.5\tleft \r\n\r\n2.5\tn/a\r\n".encode())
    assert tables.read_foreign(path) == [
        {"onset": "1.5", "trial_type": "left"},
        {"onset": "2.5", "trial_type": "n/a"},
    ]
    path.write_bytes(b"onset\tvalue\r1\t2\r")
    assert tables.read_foreign(path) == [{"onset": "1", "value": "2"}]
    path.write_bytes(b" \n")
    assert tables.read_foreign(path) == []


def test_only_line_ends_end_a_foreign_line(path):
    """Unicode has more line separators, which may stand in a cell of free text."""
    path.write_text("onset\tnote\n1\ta\u2028b\x0bc\x85d\n", encoding="utf-8")
    assert tables.read_foreign(path) == [{"onset": "1", "note": "a\u2028b\x0bc\x85d"}]


@pytest.mark.parametrize(("cells", "count"), [("1", 1), ("1\t2\t3", 3), ("1 2", 1)])
def test_a_ragged_line_is_named(path, cells, count):
    path.write_text(f"onset\tduration\n\n0\t1\n{cells}\n")
    with pytest.raises(DataError, match=rf"table\.tsv, line 4: found {count} cells, expected 2"):
        tables.read_foreign(path)


def test_a_foreign_table_in_another_encoding(path):
    path.write_bytes("onset\tunit\n1\tµV\n".encode("latin-1"))
    with pytest.raises(DataError, match="not text in UTF-8; save it as UTF-8"):
        tables.read_foreign(path)
