"""The study's tables: who is in it and why not, comparisons, the relation over people."""

import numpy as np
import pytest
from onbin import study_tables
from onbin.errors import SettingsError
from onbin.relation_tables import ATTENDED
from onbin.study_tables import comparison_rows, group_rows, participant_row

# who is in the study

A, B = "sub-1/eeg/sub-1_task-x_run-1", "sub-1/eeg/sub-1_task-x_run-2"
FEWEST = {"left": 10, "rest": 3}


def verdicts(**counts):
    return [{"verdict": name.replace("_", " ")} for name, n in counts.items() for _ in range(n)]


def windows(condition, kept, left_out=0):
    rows = verdicts(kept=kept, left_out=left_out)
    return [row | {"condition": condition} for row in rows]


def participant(**changes):
    usual = {
        "sensors": {A: verdicts(good=18, bad=2), B: verdicts(good=19, bad=0)},
        "components": {A: verdicts(kept=9, removed=2), B: verdicts(kept=9, removed=1)},
        "windows": {A: windows("left", 6, 1) + windows("rest", 3), B: windows("left", 4)},
        "max_bad_share": 0.1,
        "min_windows": FEWEST,
        "trusted": {},
        "left_out": {},
    }
    return participant_row("sub-1", **usual | changes)


def test_a_participant_in_the_study():
    assert participant() == {
        "participant": "sub-1",
        "in_study": True,
        "reason": None,
        "recordings": 2,
        "left_out": None,
        "channels_total": 19,
        "channels_bad": 2,
        "components_removed": 3,
        "windows_placed": 14,
        "windows_kept": 13,
        "fewest_windows": 3,
        "fewest_condition": "rest",
    }


def test_every_reason_to_set_aside_is_told():
    row = participant(
        sensors={A: verdicts(good=17, bad=3), B: verdicts(good=20)},
        windows={A: windows("left", 9, 5), B: windows("rest", 2)},
    )
    assert row["in_study"] is False
    assert row["reason"] == (
        f"{A}: 3 of 20 channels are bad, more than 10%; "
        "left: 9 windows kept, fewer than 10; rest: 2 windows kept, fewer than 3"
    )


def test_recordings_that_a_person_keeps_are_not_held_against_anybody():
    poor = {
        "sensors": {A: verdicts(good=17, bad=3), B: verdicts(good=20)},
        "windows": {A: windows("left", 9, 5), B: windows("rest", 2)},
    }
    one = participant(**poor, trusted={A: "seen (decided by RK)"})
    assert one["reason"] == (
        "left: 9 windows kept, fewer than 10; rest: 2 windows kept, fewer than 3"
    )
    assert participant(**poor, trusted={A: "seen", B: "seen"})["in_study"] is True


def test_left_out_recordings_are_named_and_a_participant_may_have_no_other():
    told = {B: "fell asleep (decided by RK)"}
    row = participant(left_out=told)
    assert (row["in_study"], row["left_out"]) == (True, f"{B}: fell asleep (decided by RK)")
    nothing = {"sensors": {}, "components": {}, "windows": {}}
    row = participant(**nothing, left_out=told)
    assert (row["in_study"], row["recordings"]) == (False, 0)
    assert row["reason"] == row["left_out"] == f"{B}: fell asleep (decided by RK)"
    assert participant(**nothing)["reason"] == study_tables.NO_RECORDING


def test_a_condition_of_which_nothing_was_kept_counts():
    row = participant(windows={A: windows("left", 12) + windows("rest", 0, 4)})
    assert (row["in_study"], row["fewest_windows"], row["fewest_condition"]) == (False, 0, "rest")


def test_a_condition_that_was_not_recorded_is_no_reason():
    assert participant(windows={A: windows("left", 12)})["in_study"] is True


@pytest.mark.parametrize(("bad", "share"), [(29, 0.29), (7, 0.07), (57, 0.57)])
def test_a_share_of_bad_channels_at_the_limit_is_allowed(bad, share):
    """0.29 · 100 falls below 29 in floats."""
    at_limit = {A: verdicts(good=100 - bad, bad=bad)}
    assert participant(sensors=at_limit, max_bad_share=share)["in_study"] is True
    above = {A: verdicts(good=99 - bad, bad=bad + 1)}
    assert participant(sensors=above, max_bad_share=share)["in_study"] is False


# comparisons

PEOPLE = {
    f"sub-{n}": {"participant_id": f"sub-{n}", "age": age, "group": group}
    for n, age, group in [
        (1, "20", "a"),
        (2, "35", "a"),
        (3, "30", "b"),
        (4, "50", "b"),
        (5, "n/a", "b"),
        (6, "40", "c"),
    ]
}
GAIN_UV = dict(zip(PEOPLE, (1.0, 2.0, 1.5, 4.0, 0.5, 3.0), strict=True))


def cell(condition, tag="left"):
    return {"condition": condition, "tag": tag}


def comparison(**changes):
    usual = {
        "name": "attention",
        "measure": "amplitude_uv",
        "region": "occipital",
        "term": "1f",
        "plus": [cell("attended")],
        "minus": [cell("ignored")],
        "groups": None,
        "covariate": None,
    }
    return usual | changes


def responses():
    """Attended is larger by each person's gain at 1f; other rows must not be taken."""
    rows = []
    for n, (who, gain_uv) in enumerate(GAIN_UV.items()):
        for condition, value in (("attended", 5 + n + gain_uv), ("ignored", 5.0 + n)):
            here = {"participant": who, "condition": condition, "tag": "left"}
            for site, term, factor in (
                ("Oz", "1f", 50),
                ("occipital", "2f", 70),
                ("occipital", "1f", 1),
            ):
                rows.append(here | {"site": site, "term": term, "amplitude_uv": factor * value})
            total = {"site": "occipital", "term": "sum", "amplitude_sum_uv": 10 * value}
            rows.append(here | total | {"amplitude_uv": np.nan})
    return rows


def alphas():
    return [
        {
            "participant": who,
            "condition": condition,
            "site": "occipital",
            "alpha_power_db": value,
        }
        for who, gain in GAIN_UV.items()
        for condition, value in (("attended", -gain), ("ignored", 0.0))
    ]


def compare(*comparisons, table=None, people=PEOPLE, in_study=tuple(PEOPLE)):
    table = responses() if table is None else table
    return list(comparison_rows(comparisons, table, alphas(), people, in_study, seed=1))


def test_within_people():
    (row,) = compare(comparison())
    gains_uv = np.array(list(GAIN_UV.values()))
    assert (row["kind"], row["n"], row["who"]) == ("within people", 6, " ".join(PEOPLE))
    assert (row["plus"], row["minus"]) == ("left attended", "left ignored")
    assert row["estimate"] == pytest.approx(gains_uv.mean(), rel=1e-12)
    assert row["estimate_unit"] == "µV"
    assert row["estimate_low"] < row["estimate"] < row["estimate_high"]
    assert row["effect_size"] == pytest.approx(gains_uv.mean() / gains_uv.std(ddof=1), rel=1e-12)
    # all six of one sign: 2 of the 2⁶ arrangements are as far from zero
    assert row["p"] == row["p_holm"] == 2 / 64


def test_against_zero_and_means_over_cells():
    (zero,) = compare(comparison(minus=[]))
    assert zero["minus"] == "zero"
    levels_uv = 5 + np.arange(6) + list(GAIN_UV.values())
    assert zero["estimate"] == pytest.approx(levels_uv.mean(), rel=1e-12)
    (half,) = compare(comparison(plus=[cell("attended"), cell("ignored")]))
    assert half["plus"] == "left attended, left ignored"
    assert half["estimate"] == pytest.approx(np.mean(list(GAIN_UV.values())) / 2, rel=1e-12)


def test_the_sum_of_harmonics_and_alpha_are_found_in_their_rows():
    alpha = {"plus": [cell("attended", None)], "minus": [cell("ignored", None)]}
    total, power = compare(
        comparison(measure="amplitude_sum_uv"), comparison(measure="alpha_power_db", **alpha)
    )
    assert total["estimate"] == pytest.approx(20, rel=1e-12)  # ten times the mean gain of 2 µV
    assert (power["estimate"], power["estimate_unit"]) == (pytest.approx(-2), "dB")
    assert power["plus"] == "attended"


def test_missing_people_are_left_out_and_named():
    table = [r for r in responses() if (r["participant"], r["condition"]) != ("sub-2", "ignored")]
    for row in table:
        if row["participant"] == "sub-3" and row["site"] == "occipital":
            row["amplitude_uv"] = np.nan
    (row,) = compare(comparison(), table=table, in_study=["sub-1", "sub-2", "sub-3", "sub-4"])
    assert (row["n"], row["who"]) == (2, "sub-1 sub-4")
    assert row["estimate"] == pytest.approx(2.5, rel=1e-12)


def test_nobody_left_gives_a_row_without_figures():
    rows = compare(comparison(), comparison(covariate="age"), in_study=[])
    for row in rows:
        assert (row["n"], row["who"]) == (0, "")
        assert all(np.isnan(row[name]) for name in ("estimate", "p", "p_holm", "estimate_low"))


def test_between_groups():
    (row,) = compare(comparison(groups=["group", "b", "a"]))
    assert row["kind"] == "b less a"
    assert (row["n"], row["who"]) == (5, "sub-1 sub-2 sub-3 sub-4 sub-5")  # sub-6 is of neither
    assert row["estimate"] == pytest.approx((1.5 + 4 + 0.5) / 3 - 1.5, rel=1e-12)
    assert row["estimate_unit"] == "µV"
    # of the 10 splits of 0.5, 1, 1.5, 2, 4 in 3 and 2, these give a mean difference of at least
    # 0.5 either way: the three must sum up to at least 6 or at most 4.8
    sums = [0.5 + 1 + 1.5, 0.5 + 1 + 2, 0.5 + 1 + 4, 0.5 + 1.5 + 2, 0.5 + 1.5 + 4]
    sums += [0.5 + 2 + 4, 1 + 1.5 + 2, 1 + 1.5 + 4, 1 + 2 + 4, 1.5 + 2 + 4]
    assert row["p"] == sum(s >= 6 or s <= 4.8 for s in sums) / 10


def test_covariate():
    (row,) = compare(comparison(covariate="age"))
    assert row["kind"] == "correlation with age"
    assert row["who"] == "sub-1 sub-2 sub-3 sub-4 sub-6"  # the age of sub-5 is not known
    assert row["estimate_unit"] == "rho"
    assert np.isnan(row["effect_size"])
    # ages rank 1, 3, 2, 5, 4 and gains too: 1, 3, 2, 5, 4
    assert row["estimate"] == pytest.approx(1, rel=1e-12)
    assert row["p"] == 2 / 120  # of 5! orders, that one and its reverse


def test_holm_over_the_planned_comparisons():
    """Holm 1979 by hand: p of 2/64 and 2/64 with one that cannot be tested."""
    rows = compare(comparison(), comparison(minus=[]), comparison(plus=[cell("never")]))
    assert [row["p"] for row in rows[:2]] == [2 / 64, 2 / 64]
    assert [row["p_holm"] for row in rows[:2]] == [4 / 64, 4 / 64]
    assert np.isnan(rows[2]["p_holm"])
    assert compare() == []


@pytest.mark.parametrize(
    ("changes", "people", "message"),
    [
        (
            {"covariate": "height"},
            PEOPLE,
            r"comparisons\.attention\.covariate: .* no 'height' for everybody; it has age, group",
        ),
        ({"groups": ["sex", "f", "m"]}, PEOPLE, r"comparisons\.attention\.groups: .* no 'sex'"),
        ({"covariate": "age"}, {}, "no 'age' for everybody; it has no columns"),
        (
            {"covariate": "age"},
            {who: row for who, row in PEOPLE.items() if who != "sub-4"},
            "no 'age' for everybody",
        ),
        (
            {"groups": ["group", "a", "B"]},
            PEOPLE,
            r"comparisons\.attention\.groups: nobody .* has group B; found a, b, c",
        ),
    ],
)
def test_columns_and_groups_that_participants_tsv_lacks(changes, people, message):
    with pytest.raises(SettingsError, match=message):
        compare(comparison(**changes), people=people)


# the relation over people


def relation_measures():
    rhos = {"left": (0.2, 0.4, np.nan, 0.9), ATTENDED: (-0.5, -0.5, -0.5, 0.9)}
    return [
        {"participant": f"sub-{n}", "tag": tag, "rho": rho}
        for tag, of_people in rhos.items()
        for n, rho in enumerate(of_people, start=1)
    ]


def relation_windows():
    """Amplitude falls with alpha where the tag is attended and is unrelated elsewhere."""
    rows = []
    for n in (1, 2, 3, 4):
        for x, unrelated, falling in ((0, 1, 5), (1, -1, 2), (2, -1, 2), (3, 1, -1)):
            here = {"participant": f"sub-{n}", "condition": "view", "log_alpha": x + 100 * n}
            rows += [
                here | {"tag": "left", "attended": False, "projected_amplitude_uv": unrelated},
                here | {"tag": "right", "attended": True, "projected_amplitude_uv": falling},
            ]
    return rows


def test_group_rows():
    in_study = ["sub-1", "sub-2", "sub-3"]
    rows = list(group_rows(relation_measures(), relation_windows(), in_study, seed=1))
    left, attended = rows
    assert (left["tag"], attended["tag"]) == ("left", ATTENDED)
    # sub-3 has no rho at left; sub-4 is not in the study
    assert (left["n"], attended["n"]) == (2, 3)
    z = (np.arctanh(0.2) + np.arctanh(0.4)) / 2
    assert left["rho_mean"] == pytest.approx(np.tanh(z), rel=1e-12)
    assert left["p"] == 2 / 4
    assert attended["rho_mean"] == pytest.approx(-0.5, rel=1e-12)
    assert attended["p"] == 2 / 8
    # windows of the tag, and those in which a tag was attended; levels of people do not count
    assert (left["windows"], attended["windows"]) == (12, 12)
    assert left["rm_r"] == pytest.approx(0, abs=1e-12)
    # deviations −1.5, −0.5, 0.5, 1.5 and 3, 0, 0, −3: r = −9/√(5·18)
    assert attended["rm_r"] == pytest.approx(-9 / np.sqrt(90), rel=1e-12)
    assert attended["rm_p"] < 1e-4


def test_group_of_nobody():
    assert list(group_rows(relation_measures(), relation_windows(), [], seed=1)) == []


def test_a_tag_without_windows_or_correlations_has_a_row_without_figures():
    measures = [{"participant": "sub-1", "tag": "left", "rho": np.nan}]
    (row,) = group_rows(measures, [], ["sub-1"], seed=1)
    assert (row["n"], row["windows"]) == (0, 0)
    assert all(np.isnan(row[name]) for name in ("rho_mean", "rho_low", "p", "rm_r", "rm_p"))


# frequencies that were measured and adopted


def test_measured_tags_are_named_where_they_are_used():
    flicker = [
        {"recording": A, "tag": "left", "frequency_source": "as set"},
        {"recording": B, "tag": "left", "frequency_source": "measured"},
        {"recording": "sub-2/eeg/x", "tag": "left", "frequency_source": "as set"},
        {"recording": "sub-2/eeg/x", "tag": "right", "frequency_source": "measured"},
    ]
    recordings = {"sub-1": [A, B], "sub-2": ["sub-2/eeg/x"]}
    measured = study_tables.measured_tags(flicker, recordings)
    assert measured == {"sub-1": ["left"], "sub-2": ["right"]}
    planned = [comparison(), comparison(minus=[cell("ignored", "right")])]
    rows = [{"who": "sub-1 sub-2"}, {"who": "sub-2"}]
    marked = study_tables.mark_measured(rows, planned, measured)
    assert [row["measured_in"] for row in marked] == ["sub-1", "sub-2"]
