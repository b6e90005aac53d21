"""Estimates, intervals and tests against published examples, exact counts and other libraries."""

from itertools import pairwise

import numpy as np
import pytest
from onbin import inference
from onbin.errors import DataError

# Hours of sleep gained under two drugs by the same ten people (Student 1908, Biometrika 6:1).
DRUG_1 = np.array([0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0])
DRUG_2 = np.array([1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4])
GAIN = DRUG_2 - DRUG_1

# Subject: intramural pH and PaCO2, 47 pairs of 8 people (Bland & Altman 1995, BMJ 310:446).
BLAND_ALTMAN = {
    1: [(6.68, 3.97), (6.53, 4.12), (6.43, 4.09), (6.33, 3.97)],
    2: [(6.85, 5.27), (7.06, 5.37), (7.13, 5.41), (7.17, 5.44)],
    3: [(7.4, 5.67), (7.42, 3.64), (7.41, 4.32), (7.37, 4.73), (7.34, 4.96), (7.35, 5.04)]
    + [(7.28, 5.22), (7.3, 4.82), (7.34, 5.07)],
    4: [(7.36, 5.67), (7.33, 5.1), (7.29, 5.53), (7.3, 4.75), (7.35, 5.51)],
    5: [(7.35, 4.28), (7.3, 4.44), (7.3, 4.32), (7.37, 3.23), (7.27, 4.46), (7.28, 4.72)]
    + [(7.32, 4.75), (7.32, 4.99)],
    6: [(7.38, 4.78), (7.3, 4.73), (7.29, 5.12), (7.33, 4.93), (7.31, 5.03), (7.33, 4.93)],
    7: [(6.86, 6.85), (6.94, 6.44), (6.92, 6.52)],
    8: [(7.19, 5.28), (7.29, 4.56), (7.21, 4.34), (7.25, 4.32), (7.2, 4.41), (7.19, 3.69)]
    + [(6.77, 6.09), (6.82, 5.58)],
}

# Benjamini & Hochberg 1995, J R Stat Soc B 57:289 (the list from memory).
P_VALUES = [0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344, 0.0459, 0.3240]
P_VALUES += [0.4262, 0.5719, 0.6528, 0.7590, 1.0]


def within_binomial(count, n, share, standard_errors=4):
    """Whether a count of n agrees with a true share, within standard errors."""
    return abs(count / n - share) <= standard_errors * np.sqrt(share * (1 - share) / n)


# Correlation


def test_rank_correlation_agrees_with_scipy():
    from scipy.stats import spearmanr

    rng = np.random.default_rng(0)
    x, y = rng.integers(0, 6, (2, 5, 30))
    found = inference.spearman(x, y)
    assert found.shape == (5,)
    expected = [spearmanr(a, b).statistic for a, b in zip(x, y, strict=True)]
    np.testing.assert_allclose(found, expected, rtol=1e-12)


def test_correlation_of_a_constant_is_undefined():
    # Ten times 0.1 does not sum to 1 exactly: rounding must not pass for variation.
    constant, rising = np.full(10, 0.1), np.arange(10.0)
    assert np.isnan(inference.pearson(constant, rising))
    assert np.isnan(inference.spearman(constant, rising))
    assert np.isnan(inference.partial_spearman(rising, rising[::-1], constant))
    assert np.isnan(inference.partial_spearman(rising, np.sin(rising), rising**3))


def test_partial_rank_correlation_is_the_correlation_of_residual_ranks():
    from scipy.stats import pearsonr, rankdata

    rng = np.random.default_rng(1)
    covariate = rng.normal(size=40)
    x, y = covariate + rng.normal(size=(2, 40))
    design = np.column_stack([np.ones(40), rankdata(covariate)])

    def residual(values):
        order = rankdata(values)
        return order - design @ np.linalg.lstsq(design, order, rcond=None)[0]

    np.testing.assert_allclose(
        inference.partial_spearman(x, y, covariate),
        pearsonr(residual(x), residual(y)).statistic,
        rtol=1e-10,
    )


def test_fisher_z():
    # z of 0.5 is ln(3)/2 (Fisher 1915).
    np.testing.assert_allclose(inference.fisher_z(0.5), np.log(3) / 2, rtol=1e-12)
    r = np.array([-0.99, -0.2, 0.0, 0.7])
    np.testing.assert_allclose(inference.fisher_z_inverse(inference.fisher_z(r)), r, rtol=1e-12)
    assert inference.fisher_z(1.0) == np.inf


def bland_altman():
    rows = [(subject, *pair) for subject, pairs in BLAND_ALTMAN.items() for pair in pairs]
    return np.array(rows).T


def test_repeated_measures_correlation_of_bland_and_altman():
    found = inference.repeated_measures_correlation(*bland_altman())
    # r, df, p and slope as in Bakdash & Marusich 2017, Front Psychol 8:456, to all digits of two
    # implementations in other languages. The interval is the corrected one (N = df + 2).
    np.testing.assert_allclose(found.r, -0.5067697, atol=5e-8)
    assert (found.degrees_of_freedom, found.n_units, found.n_observations) == (38, 8, 47)
    np.testing.assert_allclose(found.p, 0.0008471081, atol=5e-11)
    np.testing.assert_allclose(found.slope, -2.37083, atol=5e-6)
    interval = [found.interval.low, found.interval.high]
    np.testing.assert_allclose(interval, [-0.7067146, -0.2318631], atol=5e-8)


def test_repeated_measures_correlation_agrees_with_analysis_of_covariance():
    ols = pytest.importorskip("statsmodels.api").OLS
    subject, x, y = bland_altman()
    dummies = (subject[:, None] == np.unique(subject)).astype(float)
    fit = ols(y, np.column_stack([dummies, x])).fit()
    found = inference.repeated_measures_correlation(subject, x, y)
    np.testing.assert_allclose(found.slope, fit.params[-1], rtol=1e-9)
    np.testing.assert_allclose(found.p, fit.pvalues[-1], rtol=1e-8)
    np.testing.assert_allclose(fit.tvalues[-1] ** 2, 13.131319, atol=5e-7)


def test_single_observations_take_no_part_in_the_repeated_measures_correlation():
    subject, x, y = bland_altman()
    found = inference.repeated_measures_correlation(np.r_[subject, 9], np.r_[x, 100], np.r_[y, 100])
    reference = inference.repeated_measures_correlation(subject, x, y)
    np.testing.assert_allclose(found.r, reference.r, rtol=1e-12)
    assert found.n_observations == 47
    assert found.degrees_of_freedom == 38
    nothing = inference.repeated_measures_correlation([1, 2, 3], [1, 2, 3], [1, 2, 4])
    assert np.isnan([nothing.r, nothing.p, nothing.interval.low, nothing.slope]).all()
    constant = inference.repeated_measures_correlation(
        [1, 1, 1, 2, 2, 2], [0.1] * 3 + [0.7] * 3, [1, 2, 3, 1, 5, 2]
    )
    assert np.isnan(constant.r)


def test_repeated_measures_interval_covers():
    # Units of 6 observations with a common correlation of 0.5.
    rng = np.random.default_rng(2)
    unit = np.repeat(np.arange(8), 6)
    covered = 0
    for _ in range(1000):
        x = rng.normal(size=48)
        y = 0.5 * x + np.sqrt(0.75) * rng.normal(size=48) + unit * 10
        interval = inference.repeated_measures_correlation(unit, x, y).interval
        covered += interval.low <= 0.5 <= interval.high
    assert within_binomial(covered, 1000, 0.95)


# Missing values


def test_incomplete_rows_are_taken_out_and_counted():
    kept, dropped = inference.complete([1, np.nan, 3, 4], [1, 2, np.inf, 4])
    np.testing.assert_array_equal(kept, [[1, 4], [1, 4]])
    assert dropped == 2


@pytest.mark.parametrize(
    "call",
    [
        lambda v: inference.sign_flip_test(v, seed=0),
        lambda v: inference.two_group_test(v, v, seed=0),
        lambda v: inference.bca_interval(inference.mean, v, seed=0),
        lambda v: inference.spearman(v, np.arange(3)),
        lambda v: inference.cohen_dz(v),
        lambda v: inference.hedges_g(v, [1, 2]),
        lambda v: inference.measurement_error(v),
        lambda v: inference.split_half_reliability(v, v),
        lambda v: inference.repeated_measures_correlation([1, 1, 1], v, v),
    ],
)
def test_missing_values_are_refused(call):
    with pytest.raises(DataError, match="1 of 3 values are missing"):
        call(np.array([1.0, np.nan, 2.0]))


# Tests by rearrangement


def test_sign_flips_of_the_sleep_data():
    found = inference.sign_flip_test(GAIN, seed=0)
    np.testing.assert_allclose(found.statistic, 1.58, rtol=1e-12)
    # All signs equal, one difference of 0: 2 · 2 of 1024 arrangements are as extreme.
    assert found.p == 0.00390625
    assert (found.n, found.arrangements, found.exact) == (10, 1024, True)


@pytest.mark.parametrize("n", [1, 2, 5, 6, 8, 13])
def test_smallest_p_of_sign_flips(n):
    found = inference.sign_flip_test(np.full(n, 0.1), seed=0)
    assert found.p == 2 / 2**n
    assert found.exact


def test_drawn_sign_flips_approach_the_exact_count(monkeypatch):
    values = np.random.default_rng(3).normal(0.5, 1, 12)
    exact = inference.sign_flip_test(values, seed=0)
    monkeypatch.setattr(inference, "MOST_EXACT", 0)
    drawn = inference.sign_flip_test(values, seed=0)
    assert exact.exact
    assert not drawn.exact
    assert within_binomial(drawn.p * drawn.arrangements, drawn.arrangements, exact.p)
    assert drawn == inference.sign_flip_test(values, seed=0)
    assert drawn != inference.sign_flip_test(values, seed=1)
    # The observed arrangement counts: p is never 0.
    assert inference.sign_flip_test(np.full(30, 1.0), seed=0).p == 1 / 10_001


def test_false_positive_rate_of_sign_flips():
    # Heavy tails, symmetric: the test is exact, and the level of 50/1024 can be reached.
    rng = np.random.default_rng(4)
    p = [inference.sign_flip_test(rng.standard_t(2, 10), seed=0).p for _ in range(3000)]
    assert within_binomial(np.sum(np.array(p) <= 50 / 1024), 3000, 50 / 1024)


def test_two_groups_agree_with_scipy():
    from scipy.stats import permutation_test

    rng = np.random.default_rng(5)
    first, second = rng.normal(0.8, 1, 6), rng.normal(0, 1, 6)
    found = inference.two_group_test(first, second, seed=0)
    # It doubles the smaller tail: the same as both tails where groups are of one size.
    expected = permutation_test(
        (first, second), inference.mean_difference, n_resamples=np.inf, vectorized=False
    )
    assert (found.n, found.arrangements, found.exact) == (12, 924, True)
    np.testing.assert_allclose(found.statistic, expected.statistic, rtol=1e-12)
    np.testing.assert_allclose(found.p, expected.pvalue, rtol=1e-12)


def test_two_groups_by_hand_and_by_draw():
    # Complete separation of 3 and 3: 2 of the 20 splits. A common level changes nothing.
    found = inference.two_group_test([1e6 + 0.3, 1e6 + 0.2, 1e6 + 0.1], 1e6 + np.zeros(3), seed=0)
    assert found.p == 2 / 20
    np.testing.assert_allclose(found.statistic, 0.2, atol=1e-9)  # rounding of 1e6
    rng = np.random.default_rng(6)
    p = [
        inference.two_group_test(rng.normal(size=10), rng.normal(size=12), seed=k).p
        for k in range(300)
    ]
    assert within_binomial(np.sum(np.array(p) <= 0.05), 300, 0.05)
    assert np.isnan(inference.two_group_test([], [1.0], seed=0).p)
    assert np.isnan(inference.sign_flip_test([], seed=0).p)


def test_rank_correlation_test():
    # A perfect order of 5: 2 of 120 arrangements.
    found = inference.spearman_test([1, 2, 3, 4, 5], [2, 3, 5, 8, 13], seed=0)
    assert (found.statistic, found.exact) == (1, True)
    np.testing.assert_allclose(found.p, 2 / 120, rtol=1e-12)
    assert np.isnan(inference.spearman_test([1, 1, 1], [1, 2, 3], seed=0).p)
    rng = np.random.default_rng(7)
    p = [
        inference.spearman_test(rng.normal(size=15), rng.normal(size=15), seed=k).p
        for k in range(300)
    ]
    assert within_binomial(np.sum(np.array(p) <= 0.05), 300, 0.05)


# Intervals by bootstrap


@pytest.mark.parametrize("shape", ["mean", "pairs", "groups"])
def test_bootstrap_interval_agrees_with_scipy(shape):
    from scipy.stats import bootstrap

    rng = np.random.default_rng(8)
    x = rng.lognormal(size=25)
    samples, statistic, paired = {
        "mean": ((x,), inference.mean, True),
        "pairs": ((x, x + rng.normal(size=25)), inference.spearman, True),
        "groups": ((x, rng.lognormal(size=18)), inference.mean_difference, False),
    }[shape]
    found = inference.bca_interval(statistic, *samples, paired=paired, seed=0)
    expected = bootstrap(
        samples,
        lambda *drawn, axis: statistic(*drawn),
        vectorized=True,
        paired=paired,
        method="BCa",
        n_resamples=9999,
        rng=np.random.default_rng(1),
    ).confidence_interval
    # The ends scatter by 1 to 2 % of the width with 9 999 draws.
    np.testing.assert_allclose(
        [found.low, found.high], expected, atol=0.06 * (expected.high - expected.low)
    )


def test_bootstrap_interval_follows_a_monotone_change_of_scale():
    # BCa is transformation respecting (Efron 1987): only the interpolation of quantiles differs.
    x = np.random.default_rng(9).normal(2, 1, 20)
    plain = inference.bca_interval(inference.mean, x, seed=0)
    exponential = inference.bca_interval(lambda v: np.exp(inference.mean(v)), x, seed=0)
    np.testing.assert_allclose(
        np.log([exponential.low, exponential.high]), [plain.low, plain.high], atol=0.05
    )


def test_bootstrap_interval_covers():
    # For the mean of n normal values the bootstrap has z in place of t and n in place of n − 1:
    # its coverage is that of ± 1.96·√((n − 1)/n) under t, 0.931 for n = 20.
    from scipy.stats import t

    expected = 1 - 2 * t.sf(1.96 * np.sqrt(19 / 20), 19)
    rng = np.random.default_rng(10)
    covered = 0
    for k in range(1000):
        interval = inference.bca_interval(
            inference.mean, rng.normal(size=20), seed=k, n_resamples=999
        )
        covered += interval.low <= 0 <= interval.high
    assert within_binomial(covered, 1000, expected)


@pytest.mark.parametrize("values", [[], [1.0], [0.1] * 10])
def test_bootstrap_interval_of_too_little_is_undefined(values):
    found = inference.bca_interval(inference.mean, values, seed=0)
    assert np.isnan([found.low, found.high]).all()


def test_bootstrap_interval_where_resamples_are_undefined():
    # Five pairs: some resamples repeat one pair, and have no correlation.
    x, y = np.array([1.0, 2, 3, 4, 5]), np.array([2.0, 1, 4, 3, 6])
    found = inference.bca_interval(inference.spearman, x, y, seed=0)
    assert -1 <= found.low < 0.8 < found.high <= 1
    undefined = inference.bca_interval(inference.spearman, x, np.ones(5), seed=0)
    assert np.isnan(undefined.low)
    with pytest.raises(DataError, match=r"found \[5, 4\] values"):
        inference.bca_interval(inference.spearman, x, y[:4], seed=0)


# Effect sizes


def test_effect_sizes_of_the_sleep_data():
    from scipy.stats import ttest_rel

    # d_z = t/√n, t = 4.0621277; times the exact correction for 9 degrees of freedom.
    np.testing.assert_allclose(inference.cohen_dz(GAIN), 1.2845576, atol=5e-8)
    np.testing.assert_allclose(
        inference.cohen_dz(GAIN), ttest_rel(DRUG_2, DRUG_1).statistic / np.sqrt(10), rtol=1e-12
    )
    np.testing.assert_allclose(inference.hedges_gz(GAIN), 1.1739249, atol=5e-8)


def test_hedges_g_of_two_groups():
    from scipy.stats import ttest_ind

    first, second = DRUG_2, DRUG_1[:7]
    t = ttest_ind(first, second).statistic
    expected = t * np.sqrt(1 / 10 + 1 / 7) * inference.hedges_correction(15)
    np.testing.assert_allclose(inference.hedges_g(first, second), expected, rtol=1e-12)


def test_effect_size_without_variation_is_undefined():
    assert np.isnan(inference.cohen_dz([0.1] * 10))
    assert np.isnan(inference.cohen_dz([1.0]))
    assert np.isnan(inference.hedges_g([1.0, 1.0], [2.0, 2.0]))
    assert np.isnan(inference.hedges_g([1.0], [2.0]))
    assert np.isnan(inference.hedges_g([], [2.0, 3.0]))


@pytest.mark.parametrize(
    ("df", "exact"),
    [(2, 0.56419), (3, 0.72360), (4, 0.79788), (5, 0.84075), (6, 0.86863), (8, 0.90270)]
    + [(9, 0.91387), (10, 0.92275), (15, 0.94901), (19, 0.95991), (20, 0.96194), (29, 0.97387)]
    + [(30, 0.97475), (58, 0.98700), (100, 0.99248)],
)
def test_hedges_correction(df, exact):
    # Hedges 1981, J Educ Stat 6:107: exact values, and his approximation 1 − 3/(4·df − 1).
    np.testing.assert_allclose(inference.hedges_correction(df), exact, atol=5e-6)
    np.testing.assert_allclose(
        inference.hedges_correction(df), 1 - 3 / (4 * df - 1), atol=0.03 / df**1.8 + 1e-6
    )


def test_smallest_detectable_effect():
    # Power tables: d = 0.5 needs 34 pairs for 80 % (common practice; Cohen 1988, from memory).
    assert inference.smallest_detectable_dz(34) <= 0.5 < inference.smallest_detectable_dz(33)
    assert np.isnan(inference.smallest_detectable_dz(1))
    sizes = [inference.smallest_detectable_dz(n) for n in (2, 3, 5, 10, 30, 100, 1000)]
    assert all(large > small for large, small in pairwise(sizes))
    # (1.959964 + 0.841621)/√n of the normal distribution, for many people.
    np.testing.assert_allclose(sizes[-1], 2.801585 / np.sqrt(1000), rtol=2e-3)


@pytest.mark.parametrize("n", [3, 8, 20, 60])
def test_smallest_detectable_effect_agrees_with_statsmodels(n):
    power = pytest.importorskip("statsmodels.stats.power")
    expected = power.TTestPower().solve_power(nobs=n, alpha=0.05, power=0.8)
    # Its root finder stops at 1e-5.
    np.testing.assert_allclose(inference.smallest_detectable_dz(n), expected, rtol=1e-5)


# Families of tests


def test_adjustments_of_the_published_family():
    holm = inference.holm(P_VALUES)
    found = inference.benjamini_hochberg(P_VALUES)
    # Published: at 0.05 the step-up procedure rejects four, Bonferroni's (and Holm's) three.
    assert (np.sum(found <= 0.05), np.sum(holm <= 0.05)) == (4, 3)
    expected = [0.0015, 0.0030, 0.0095, 0.035625, 0.0603, 0.063857, 0.063857, 0.0645, 0.0765]
    expected += [0.4860, 0.58118, 0.71487, 0.75323, 0.81321, 1]
    np.testing.assert_allclose(found, expected, atol=5e-6)
    expected = [0.0015, 0.0056, 0.0247, 0.1140, 0.2211, 0.2780, 0.2780, 0.2780, 0.3213]
    np.testing.assert_allclose(holm, expected + [1] * 6, atol=1e-9)


def test_adjustments_of_a_small_family():
    # Worked by hand.
    p = [0.01, 0.04, 0.03, 0.005]
    np.testing.assert_allclose(inference.holm(p), [0.03, 0.06, 0.06, 0.02], rtol=1e-12)
    np.testing.assert_allclose(inference.benjamini_hochberg(p), [0.02, 0.04, 0.04, 0.02])
    # A test that could not be made is no member of the family.
    adjusted = inference.holm([0.01, np.nan, 0.04, 0.03, 0.005])
    np.testing.assert_allclose(adjusted, [0.03, np.nan, 0.06, 0.06, 0.02])
    assert inference.holm([]).size == 0


@pytest.mark.parametrize(("name", "other"), [("holm", "holm"), ("benjamini_hochberg", "fdr_bh")])
def test_adjustments_agree_with_statsmodels(name, other):
    multitest = pytest.importorskip("statsmodels.stats.multitest")
    p = np.random.default_rng(11).uniform(size=40).round(2)  # with ties
    expected = multitest.multipletests(p, method=other)[1]
    np.testing.assert_allclose(getattr(inference, name)(p), expected, rtol=1e-10)


# Data quality


def test_measurement_error_of_mean_amplitudes():
    # SD/√K over windows (Luck et al. 2021), and mne's figure for the same data, which takes the
    # population SD: smaller by √((K − 1)/K).
    mne = pytest.importorskip("mne")
    data = np.random.default_rng(3).normal(size=(20, 2, 100))
    found = [inference.measurement_error(channel) for channel in data.mean(axis=-1).T]
    np.testing.assert_allclose(found, [0.01799843, 0.02840969], atol=5e-9)

    epochs = mne.EpochsArray(data, mne.create_info(2, 100, "eeg"), verbose="error")
    reference = mne.stats.erp.compute_sme(epochs, start=0, stop=0.99).ravel()
    # Its range leaves the last sample out.
    found = [inference.measurement_error(channel) for channel in data[..., :99].mean(axis=-1).T]
    np.testing.assert_allclose(found, reference * np.sqrt(20 / 19), rtol=1e-6)
    assert np.isnan(inference.measurement_error([1.0]))


def test_bootstrapped_measurement_error():
    # Of a mean it is the analytic one times √((K − 1)/K); 1000 draws give 2.2 % standard error.
    values = np.random.default_rng(12).normal(size=(30, 3))
    found = inference.bootstrap_measurement_error(values, lambda v: v.mean(axis=0), seed=0)
    analytic = [inference.measurement_error(v) * np.sqrt(29 / 30) for v in values.T]
    np.testing.assert_allclose(found, analytic, rtol=0.09)
    again = inference.bootstrap_measurement_error(values, lambda v: v.mean(axis=0), seed=0)
    np.testing.assert_array_equal(found, again)
    assert np.isnan(inference.bootstrap_measurement_error(values[:1], np.mean, seed=0))


def test_bootstrapped_measurement_error_of_an_evoked_amplitude():
    # A strong response: the amplitude's error is that of the real part along it, σ/√K.
    rng = np.random.default_rng(13)
    noise = rng.normal(size=(200, 2)) @ [1, 1j]
    found = inference.bootstrap_measurement_error(20 + noise, lambda z: abs(z.mean()), seed=0)
    np.testing.assert_allclose(found, inference.measurement_error(noise.real), rtol=0.09)


@pytest.mark.parametrize(
    ("r", "stepped_up"),
    [(0.1, 0.18182), (0.3, 0.46154), (0.5, 0.66667), (0.6, 0.75), (0.7, 0.82353)]
    + [(0.8, 0.88889), (0.9, 0.94737)],
)
def test_spearman_brown(r, stepped_up):
    # Spearman 1910 and Brown 1910 (from memory): 2r / (1 + r).
    np.testing.assert_allclose(inference.spearman_brown(r), stepped_up, atol=5e-6)


def test_split_half_reliability_of_known_variances():
    # Between-person variance 1, error variance 1 in each half: halves correlate 1/2, and the mean
    # of both has the reliability 1/(1 + 1/2) = 2/3. 2000 people: standard error about 0.015.
    rng = np.random.default_rng(14)
    first, second = rng.normal(size=2000) + rng.normal(size=(2, 2000))
    np.testing.assert_allclose(inference.split_half_reliability(first, second), 2 / 3, atol=0.05)
    several = inference.split_half_reliability(
        np.column_stack([first, second]), np.column_stack([second, first])
    )
    np.testing.assert_allclose(several, inference.split_half_reliability(first, second))
    assert np.isnan(inference.split_half_reliability([1, 2], [1, 2]))
    assert np.isnan(inference.split_half_reliability([1, 1, 1], [1, 2, 3]))


def test_a_perfect_repeated_measures_correlation_has_no_p_to_speak_of():
    found = inference.repeated_measures_correlation(
        [0, 0, 0, 1, 1, 1], [1, 2, 3, 5, 6, 7], [2, 4, 6, 0, 2, 4]
    )
    assert found.r == pytest.approx(1)
    assert found.p == pytest.approx(0, abs=1e-6)  # df = 3: t is infinite or nearly so
