"""Windows' alpha beside windows' responses, by tag and by what was attended."""

import math

import numpy as np
import pytest
from onbin.relation_tables import ATTENDED, UNATTENDED, join, relation_rows

TAGS = ("left", "right")
ATTENDED_IN = {"attend_left": "left", "attend_right": "right", "view": None}


def tables(windows_each=6, slope=1.0):
    """Tables of windows: amplitude follows alpha at the attended tag, and the reverse elsewhere."""
    rng = np.random.default_rng(7)
    alpha, response = [], []
    number = 0
    for condition, attended in ATTENDED_IN.items():
        for index in range(windows_each):
            number += 1
            log_alpha = rng.normal() + 10 * (condition == "view")
            common = {
                "participant": "sub-1",
                "recording": "sub-1/eeg/sub-1_task-x",
                "window_number": number,
                "condition": condition,
            }
            for site, value in (("occipital", log_alpha), ("frontal", 99.0)):
                alpha.append(common | {"site": site, "log_alpha": value})
            for tag in TAGS:
                sign = slope if tag == attended else -slope
                values = {"occipital": sign * log_alpha, "frontal": 99.0}
                response += [
                    common
                    | {
                        "trial": index + 1,
                        "tag": tag,
                        "frequency_source": "measured" if tag == "left" else "as set",
                        "site": site,
                        "projected_amplitude_uv": value,
                    }
                    for site, value in values.items()
                ]
    return alpha, response


def joined(**changes):
    return join(*tables(**changes), "occipital", "occipital", ATTENDED_IN)


def test_each_response_gets_the_alpha_of_its_window():
    rows = joined()
    assert len(rows) == 3 * 6 * len(TAGS)
    for row in rows:
        assert abs(row["projected_amplitude_uv"]) == abs(row["log_alpha"])
    attended = {(row["condition"], row["tag"]): row["attended"] for row in rows}
    assert attended == {
        ("attend_left", "left"): True,
        ("attend_left", "right"): False,
        ("attend_right", "left"): False,
        ("attend_right", "right"): True,
        ("view", "left"): None,
        ("view", "right"): None,
    }


def test_regions_of_alpha_and_of_the_response_are_chosen_apart():
    alpha, response = tables()
    rows = join(alpha, response, "frontal", "occipital", ATTENDED_IN)
    assert {row["log_alpha"] for row in rows} == {99.0}
    assert {row["site"] for row in rows} == {"occipital"}


def test_relation_by_tag_and_attention():
    rows = {row["tag"]: row for row in relation_rows(joined(), 200, seed=1)}
    assert list(rows) == [*TAGS, ATTENDED, UNATTENDED]
    # "view", with neither attended, counts at the tags only
    assert {tag: row["windows"] for tag, row in rows.items()} == {
        "left": 18,
        "right": 18,
        ATTENDED: 12,
        UNATTENDED: 12,
    }
    assert rows[ATTENDED]["rho"] == pytest.approx(1)
    assert rows[UNATTENDED]["rho"] == pytest.approx(-1)
    # the difference of 10 between conditions is no relation
    assert abs(rows["left"]["rho"]) < 0.9
    assert rows["left"]["reason"] is None
    assert rows["left"]["frequency_source"] == "measured"
    assert rows[ATTENDED]["frequency_source"] == "as set, measured"


def test_same_seed_same_p():
    first, again = (list(relation_rows(joined(), 200, seed=3)) for _ in range(2))
    assert first == again


def test_too_few_windows_have_a_row_with_the_reason():
    rows = {row["tag"]: row for row in relation_rows(joined(windows_each=2), 200, seed=1)}
    assert rows[ATTENDED]["windows"] == 4
    assert math.isnan(rows[ATTENDED]["rho"])
    assert rows[ATTENDED]["reason"] == "4 windows of at least 8"


def test_no_attended_tag_no_row_of_it():
    windows = join(*tables(), "occipital", "occipital", dict.fromkeys(ATTENDED_IN))
    assert [row["tag"] for row in relation_rows(windows, 200, seed=1)] == list(TAGS)
    assert list(relation_rows([], 200, seed=1)) == []
