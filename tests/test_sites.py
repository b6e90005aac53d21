"""Sites: channels that all recordings have, and regions of them; and arrays in files."""

import numpy as np
import pytest
from onbin import arrays, sites
from onbin.errors import DataError


def test_common_channels_come_first_then_regions():
    places = sites.common_sites([["O1", "Oz", "Fz"], ["Oz", "O1"]], {"back": ["O1", "Oz", "O2"]})
    assert [(p.name, p.kind, p.channels) for p in places] == [
        ("O1", "channel", ("O1",)),
        ("Oz", "channel", ("Oz",)),
        ("back", "region", ("O1", "Oz")),
    ]


def test_a_region_is_the_mean_of_its_channels():
    places = sites.common_sites([["O1", "Oz"]], {"back": ["O1", "Oz"]})
    matrix = sites.averaging(places, ["Fz", "O1", "Oz"])
    np.testing.assert_array_equal(matrix, [[0, 1, 0], [0, 0, 1], [0, 0.5, 0.5]])


def test_a_region_without_channels_is_told():
    with pytest.raises(DataError, match=r"the region back has none of its channels .O2."):
        sites.common_sites([["O1"]], {"back": ["O2"]})


def test_arrays_survive_and_their_bytes_depend_on_them_alone(tmp_path):
    named = {"b": [1.5, 2], "a": np.array([1j]), "names": ["x", "yy"]}
    for name in ("one.npz", "two.npz"):
        arrays.write(tmp_path / name, **named)
        named = dict(reversed(named.items()))
    assert (tmp_path / "one.npz").read_bytes() == (tmp_path / "two.npz").read_bytes()
    back = arrays.read(tmp_path / "one.npz")
    assert back["names"].tolist() == ["x", "yy"]
    np.testing.assert_array_equal(back["a"], [1j])


def test_nothing_in_a_file_of_arrays_is_executed(tmp_path):
    np.savez(tmp_path / "evil.npz", a=np.array([{"an": "object"}], dtype=object))
    with pytest.raises(DataError, match="allow_pickle"):
        arrays.read(tmp_path / "evil.npz")
