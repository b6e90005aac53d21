"""The relation of alpha and response, on windows whose relation is known."""

import numpy as np
import pytest
from onbin.errors import DataError
from onbin.inference import repeated_measures_correlation
from onbin.relation import (
    alpha_halves,
    group_relation,
    pooled_relation,
    window_relation,
)

CONDITION = np.repeat(["low", "high"], 30)
NUMBER = np.random.default_rng(0).permutation(60)


def related(rng, slope):
    """Log alpha and amplitude of 60 windows; both are larger in the second condition."""
    level = 3 * (CONDITION == "high")
    alpha = rng.normal(size=60)
    return alpha + level, slope * alpha + rng.normal(size=60) + level


def test_relation_within_conditions():
    alpha, amplitude = related(np.random.default_rng(1), -1)
    found = window_relation(alpha, amplitude, CONDITION, NUMBER, NUMBER, seed=0)
    # Pearson's r is −1/√2 here, Spearman's (6/π)·asin(r/2) = −0.69; standard error about 0.08.
    np.testing.assert_allclose(found.rho, -0.69, atol=0.25)
    np.testing.assert_allclose(found.partial_rho, found.rho, atol=0.1)
    assert found.p == 1 / 2001
    assert (found.n_windows, found.n_left_out, found.reason) == (60, 0, "")
    assert found == window_relation(alpha, amplitude, CONDITION, NUMBER, NUMBER, seed=0)


def test_a_difference_between_conditions_is_no_relation():
    # Alpha and amplitude share their condition's level and its spread, and nothing else. With the
    # windows permuted over both conditions, unequal spread would make 12 % of p values small.
    rng = np.random.default_rng(2)
    few = np.arange(60) < 10
    condition = np.where(few, "few", "many")
    p = []
    for seed in range(400):
        alpha, amplitude = rng.normal(size=(2, 60)) * np.where(few, 10, 1) + 30 * few
        found = window_relation(
            alpha, amplitude, condition, NUMBER, NUMBER, seed, n_permutations=199
        )
        p.append(found.p)
    # 0.05 is reached exactly with 199 permutations; four binomial standard errors are 0.044.
    np.testing.assert_allclose(np.mean(np.array(p) <= 0.05), 0.05, atol=0.044)


def test_windows_of_one_trial_count_as_alike():
    # Alpha and amplitude have a level for each trial, unrelated to each other: with single windows
    # permuted, far more than 5 % of p values would be small.
    rng = np.random.default_rng(6)
    trial = np.repeat(np.arange(20), 3)
    p = []
    for seed in range(400):
        alpha, amplitude = rng.normal(size=(2, 20)).repeat(3, axis=1) + rng.normal(size=(2, 60)) / 2
        found = window_relation(
            alpha, amplitude, ["all"] * 60, trial, NUMBER, seed, n_permutations=199
        )
        p.append(found.p)
    # 0.05 is reached exactly with 199 permutations; four binomial standard errors are 0.044.
    np.testing.assert_allclose(np.mean(np.array(p) <= 0.05), 0.05, atol=0.044)


def test_shared_drift_shows_in_the_partial_relation():
    rng = np.random.default_rng(3)
    number = np.arange(200)
    alpha, amplitude = 0.02 * number + rng.normal(size=(2, 200))
    found = window_relation(alpha, amplitude, ["all"] * 200, number, number, seed=0)
    assert found.rho > 0.4
    # Standard error of a null correlation of 200 is 0.07.
    assert abs(found.partial_rho) < 0.25


def test_windows_that_cannot_take_part_are_counted():
    rng = np.random.default_rng(4)
    alpha, amplitude = related(rng, 1)
    whole = window_relation(alpha, amplitude, CONDITION, NUMBER, NUMBER, seed=0)
    found = window_relation(
        np.r_[alpha, np.nan, 1, 1],
        np.r_[amplitude, 1, np.nan, 1],
        [*CONDITION, "low", "low", "alone"],
        np.r_[NUMBER, 60, 61, 62],
        np.r_[NUMBER, 60, 61, 62],
        seed=0,
    )
    assert (found.n_windows, found.n_left_out) == (60, 3)
    assert (found.rho, found.partial_rho, found.p) == (whole.rho, whole.partial_rho, whole.p)


def test_too_little_gives_a_reason():
    few = window_relation(np.arange(7), np.arange(7), ["a"] * 7, np.arange(7), np.arange(7), seed=0)
    assert np.isnan([few.rho, few.partial_rho, few.p]).all()
    assert few.reason == "7 windows of at least 8"
    # A level for each condition, which is no exact binary number, is no variation.
    constant = np.where(CONDITION == "high", 0.1, 0.7)
    flat = window_relation(constant, np.arange(60), CONDITION, NUMBER, NUMBER, seed=0)
    assert np.isnan(flat.rho)
    assert "does not vary" in flat.reason
    alpha, amplitude = related(np.random.default_rng(5), 1)
    timeless = window_relation(alpha, amplitude, CONDITION, NUMBER, np.zeros(60), seed=0)
    assert np.isfinite(timeless.rho)
    assert np.isnan(timeless.partial_rho)
    assert "time on task" in timeless.reason
    with pytest.raises(DataError, match="one value a window"):
        window_relation(alpha, amplitude[:-1], CONDITION, NUMBER, NUMBER, seed=0)


def test_group_of_people():
    # Fisher's z of tanh(z) is z: mean 0.3; all positive, so 2 of 2⁵ sign arrangements.
    rhos = np.tanh([0.1, 0.2, 0.3, 0.4, 0.5])
    found = group_relation(np.r_[rhos, np.nan], seed=0)
    np.testing.assert_allclose(found.mean_rho, np.tanh(0.3), rtol=1e-12)
    assert found.test.p == 2 / 32
    assert (found.n_people, found.n_left_out) == (5, 1)
    assert np.tanh(0.1) < found.interval.low < found.mean_rho < found.interval.high < np.tanh(0.5)
    single = group_relation([0.3], seed=0)
    np.testing.assert_allclose(single.mean_rho, 0.3, rtol=1e-12)
    assert np.isnan(single.interval.low)
    assert np.isnan(group_relation([np.nan], seed=0).mean_rho)


def test_pooled_relation_gives_each_person_a_level_in_each_condition():
    rng = np.random.default_rng(6)
    person = np.tile(np.repeat(["1", "2", "3"], 10), 2)
    cell = np.char.add(person, CONDITION)
    alpha, amplitude = related(rng, 1)
    found = pooled_relation(person, CONDITION, np.r_[np.nan, alpha[1:]], amplitude)
    expected = repeated_measures_correlation(cell[1:], alpha[1:], amplitude[1:])
    np.testing.assert_allclose(found.r, expected.r, rtol=1e-12)
    assert (found.n_units, found.n_observations, found.degrees_of_freedom) == (6, 59, 52)


def test_halves_by_alpha_within_conditions():
    alpha = [1, 2, 3, 4, 5, np.nan, 30, 10, 20, 10]
    low, high = alpha_halves(alpha, ["a"] * 6 + ["b"] * 4)
    np.testing.assert_array_equal(np.flatnonzero(low), [0, 1, 7, 9])
    np.testing.assert_array_equal(np.flatnonzero(high), [3, 4, 6, 8])
    # Equal values: the earlier is the lower.
    low, high = alpha_halves([1, 1, 1, 1], ["a"] * 4)
    np.testing.assert_array_equal(low, [True, True, False, False])
    np.testing.assert_array_equal(high, ~low)
