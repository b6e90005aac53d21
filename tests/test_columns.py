"""Every column that a user can meet is explained, in the form that BIDS asks for."""

import ast
from pathlib import Path

from onbin import tables
from onbin.columns import COLUMNS

SCRIPTS = sorted((Path(__file__).parents[1] / "scripts").glob("*.py"))
UNITS = {
    "_hz": "Hz",
    "_s": "s",
    "_ms": "ms",
    "_uv": "µV",
    "_uv2": "µV²",
    "_db": "dB",
    "_rad": "rad",
}


def written():
    """Columns that scripts name: lists in capitals, and lists handed to write_table."""
    for path in SCRIPTS:
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            lists = []
            if isinstance(node, ast.Assign) and ast.unparse(node.targets[0]).isupper():
                lists = [node.value]
            elif isinstance(node, ast.Call) and ast.unparse(node.func) == "tables.write_table":
                lists = node.args
            for item in (i for found in lists if isinstance(found, ast.List) for i in found.elts):
                if isinstance(item, ast.Constant) and isinstance(item.value, str):
                    yield f"{path.stem}.py", item.value


def test_every_column_of_every_step_is_described():
    assert [(script, name) for script, name in written() if name not in COLUMNS] == []


def test_nothing_is_described_that_no_step_writes():
    assert set(COLUMNS) - {name for _, name in written()} == set()


def test_a_description_is_a_sentence_and_only_numbers_have_units():
    for name, column in COLUMNS.items():
        assert column.description.endswith("."), name
        assert column.kind in ("number", "integer", "text", "boolean"), name
        assert column.kind == "number" or not column.unit, name


def test_units_are_those_of_the_name():
    for name, column in COLUMNS.items():
        suffix = f"_{name.rsplit('_', 1)[-1]}"
        if suffix in UNITS and "_per_" not in name:
            assert column.unit == UNITS[suffix], name


def test_dictionary_has_the_keys_of_bids():
    """BIDS 1.10, tabular files: Description and Units by column; further keys are allowed."""
    described = tables.dictionary(["participant", "snr", "amplitude_uv"])
    assert list(described) == ["participant", "snr", "amplitude_uv"]
    assert described["participant"] == {"Description": COLUMNS["participant"].description}
    assert described["amplitude_uv"]["Units"] == "µV"
    assert described["snr"]["WithoutResponse"] == COLUMNS["snr"].null
    assert described["snr"]["Source"] == COLUMNS["snr"].source
    assert "Units" not in described["snr"]
