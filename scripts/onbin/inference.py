"""Estimates, intervals and tests over people or windows.

A missing value is never dropped in passing: every function wants finite numbers, and `complete`
takes incomplete rows out and counts them. A quantity that its data do not define, such as the
correlation of a constant, is nan. Whatever is drawn at random is drawn from a seed.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import combinations, permutations
from math import comb, factorial

import numpy as np

from onbin.errors import DataError

CONFIDENCE = 0.95
MOST_EXACT = 10_000  # up to so many arrangements, all of them are gone through
DRAWS = 10_000  # otherwise so many are drawn
RESAMPLES = 9_999
SAME = 1e-12  # statistics closer than this share of the largest term are ties


@dataclass(frozen=True)
class PermutationTest:
    """Two-sided test of a statistic against its arrangements.

    Attributes
    ----------
    statistic, p : float
    n : int
        Values that took part.
    arrangements : int
        How many the p rests on.
    exact : bool
        Whether these are all there are. Otherwise the observed one counts as one more
        (Phipson & Smyth 2010, from memory), so p is never 0.
    """

    statistic: float
    p: float
    n: int
    arrangements: int
    exact: bool


@dataclass(frozen=True)
class Interval:
    """Confidence interval; both ends are nan where the data define none."""

    low: float
    high: float


@dataclass(frozen=True)
class RepeatedMeasuresCorrelation:
    """Correlation within units (people, or people × conditions), common to all.

    Attributes
    ----------
    r, p : float
    degrees_of_freedom : int
    interval : Interval
    slope : float
        Of y over x within people.
    n_units, n_observations : int
        Units with two or more observations, and their observations.
    """

    r: float
    p: float
    degrees_of_freedom: int
    interval: Interval
    slope: float
    n_units: int
    n_observations: int


def complete(*values: np.ndarray) -> tuple[list[np.ndarray], int]:
    """Take out every row that misses a value, and count them.

    Parameters
    ----------
    *values : array_like, shape (n,)

    Returns
    -------
    kept : list of ndarray, shape (n_kept,)
    dropped : int
    """
    table = np.array(values, dtype=float)
    finite = np.isfinite(table).all(axis=0)
    return list(table[:, finite]), int((~finite).sum())


def _finite(values: np.ndarray) -> np.ndarray:
    """Array of floats, in which nothing may be missing."""
    values = np.asarray(values, dtype=float)
    if not np.isfinite(values).all():
        missing = int((~np.isfinite(values)).sum())
        raise DataError(
            f"{missing} of {values.size} values are missing or infinite: take them out, and count "
            "them, before the test."
        )
    return values


def _centred(values: np.ndarray, level: np.ndarray) -> np.ndarray:
    """Deviations from a level, with what rounding leaves of none set to zero."""
    deviations = values - level
    largest = np.abs(values).max(axis=-1, keepdims=True, initial=0)
    return np.where(np.abs(deviations) <= SAME * largest, 0, deviations)


def _is_constant(values: np.ndarray) -> bool:
    return values.size == 0 or bool(np.ptp(values) <= SAME * np.abs(values).max())


# Correlation


def pearson(x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Product-moment correlation over the last axis; nan where one side is constant.

    Parameters
    ----------
    x, y : ndarray, shape (..., n)

    Returns
    -------
    r : ndarray, shape (...)
    """
    x, y = (_centred(v, v.mean(axis=-1, keepdims=True)) for v in (x, y))
    norm = np.sqrt((x * x).sum(axis=-1) * (y * y).sum(axis=-1))
    with np.errstate(invalid="ignore"):
        return np.clip((x * y).sum(axis=-1) / norm, -1, 1)


def ranks(values: np.ndarray) -> np.ndarray:
    """Ranks along the last axis from 1, ties sharing their mean."""
    from scipy.stats import rankdata

    return rankdata(_finite(values), axis=-1)


def spearman(x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Rank correlation over the last axis; nan where one side is constant.

    Parameters
    ----------
    x, y : array_like, shape (..., n)

    Returns
    -------
    rho : ndarray, shape (...)
    """
    return pearson(ranks(x), ranks(y))


def partial_spearman(x: np.ndarray, y: np.ndarray, covariate: np.ndarray) -> np.ndarray:
    """Rank correlation of x and y with the ranks of a covariate held constant.

    Parameters
    ----------
    x, y, covariate : array_like, shape (..., n)

    Returns
    -------
    rho : ndarray, shape (...)
        nan where a side is constant or follows the covariate exactly.
    """
    x, y, z = ranks(x), ranks(y), ranks(covariate)
    xy, xz, yz = pearson(x, y), pearson(x, z), pearson(y, z)
    left = (1 - xz**2) * (1 - yz**2)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(left > SAME, (xy - xz * yz) / np.sqrt(left), np.nan)


def fisher_z(r: np.ndarray) -> np.ndarray:
    """Fisher's z of a correlation, artanh r; infinite at ±1."""
    with np.errstate(divide="ignore"):
        return np.arctanh(r)


def fisher_z_inverse(z: np.ndarray) -> np.ndarray:
    """Correlation of a Fisher's z."""
    return np.tanh(z)


def within(values: np.ndarray, unit: np.ndarray) -> np.ndarray:
    """Deviations of values from the mean of the unit, such as a condition, that they belong to.

    Parameters
    ----------
    values : array_like, shape (n,)
    unit : array_like, shape (n,)
        Labels.

    Returns
    -------
    deviations : ndarray, shape (n,)
    """
    values = _finite(values)
    _, index, count = np.unique(unit, return_inverse=True, return_counts=True)
    return _centred(values, (np.bincount(index, values, count.size) / count)[index])


def repeated_measures_correlation(
    unit: np.ndarray, x: np.ndarray, y: np.ndarray, confidence: float = CONFIDENCE
) -> RepeatedMeasuresCorrelation:
    """Correlation over observations within units, each with a level of its own.

    Parameters
    ----------
    unit : array_like, shape (n,)
        Label of the person, or of the person and condition, of each observation.
    x, y : array_like, shape (n,)

    Returns
    -------
    correlation : RepeatedMeasuresCorrelation
        nan where fewer than 2 degrees of freedom are left or one side never varies.

    Notes
    -----
    Bakdash & Marusich 2017, Front Psychol 8:456; Bland & Altman 1995, BMJ 310:446. With N
    observations of k units, df = N − k − 1. The interval is Fisher's for the df + 2 observations
    that an ordinary correlation with these df would have: its standard error is 1/√(df − 1). An
    older published form has 1/√(df − 3) and is too wide.
    """
    from scipy.special import ndtri, stdtr

    x, y = within(x, unit), within(y, unit)
    _, count = np.unique(unit, return_counts=True)
    n_units, n_observations = int((count > 1).sum()), int(count[count > 1].sum())
    df = max(n_observations - n_units - 1, 0)
    r = float(pearson(x, y)) if df > 1 else np.nan
    if not np.isfinite(r):
        nothing = Interval(np.nan, np.nan)
        return RepeatedMeasuresCorrelation(
            np.nan, np.nan, df, nothing, np.nan, n_units, n_observations
        )
    with np.errstate(divide="ignore"):
        t = r * np.sqrt(np.divide(df, 1 - r * r))
    half = ndtri((1 + confidence) / 2) / np.sqrt(df - 1)
    low, high = fisher_z_inverse(fisher_z(r) + np.array([-half, half])).tolist()
    return RepeatedMeasuresCorrelation(
        r=r,
        p=float(2 * stdtr(df, -abs(t))),
        degrees_of_freedom=df,
        interval=Interval(low, high),
        slope=float((x * y).sum() / (x * x).sum()),
        n_units=n_units,
        n_observations=n_observations,
    )


# Tests by rearrangement


def _two_sided(
    observed: float, arranged: np.ndarray, exact: bool, scale: float, n: int
) -> PermutationTest:
    """Share of arrangements whose statistic is at least as far from zero."""
    extreme = int((np.abs(arranged) >= abs(observed) - SAME * scale).sum())
    p = extreme / arranged.size if exact else (extreme + 1) / (arranged.size + 1)
    return PermutationTest(float(observed), p, n, arranged.size, exact)


def _undefined(n: int) -> PermutationTest:
    return PermutationTest(np.nan, np.nan, n, 0, False)


def sign_flip_test(values: np.ndarray, seed: int) -> PermutationTest:
    """Test whether the mean of one sample, or of paired differences, is zero.

    Under the null hypothesis the values are symmetric about zero, so each sign is as likely as
    the other. All 2ⁿ arrangements are gone through where they are at most 10 000 (n ≤ 13).

    Parameters
    ----------
    values : array_like, shape (n,)
    seed : int

    Returns
    -------
    test : PermutationTest
        The statistic is the mean. nan for no values.
    """
    values = _finite(values)
    n = values.size
    if n == 0:
        return _undefined(0)
    exact = 2**n <= MOST_EXACT
    if exact:
        flips = (np.arange(2**n)[:, None] >> np.arange(n)) & 1
    else:
        flips = np.random.default_rng(seed).integers(0, 2, (DRAWS, n))
    arranged = (1 - 2 * flips) @ values / n
    return _two_sided(values.mean(), arranged, exact, np.abs(values).max(), n)


def two_group_test(first: np.ndarray, second: np.ndarray, seed: int) -> PermutationTest:
    """Test whether two independent groups differ in their mean.

    Under the null hypothesis both come from one distribution. All ways to split the values are
    gone through where they are at most 10 000.

    Parameters
    ----------
    first, second : array_like, shape (n_first,), (n_second,)
    seed : int

    Returns
    -------
    test : PermutationTest
        The statistic is mean(first) − mean(second). nan where a group is empty.
    """
    first, second = _finite(first), _finite(second)
    pooled = np.concatenate([first, second])
    n, n_first = pooled.size, first.size
    if first.size == 0 or second.size == 0:
        return _undefined(n)
    exact = comb(n, n_first) <= MOST_EXACT
    if exact:
        chosen = np.array(list(combinations(range(n), n_first)))
    else:
        order = np.random.default_rng(seed).permuted(np.tile(np.arange(n), (DRAWS, 1)), axis=1)
        chosen = order[:, :n_first]
    # Deviations from the grand mean sum to zero: those of one group give the difference.
    deviations = (pooled - pooled.mean()) * (1 / n_first + 1 / second.size)
    observed, arranged = deviations[:n_first].sum(), deviations[chosen].sum(axis=1)
    return _two_sided(observed, arranged, exact, np.abs(pooled).max(), n)


def spearman_test(x: np.ndarray, y: np.ndarray, seed: int) -> PermutationTest:
    """Test whether two measures are unrelated, by rearranging one of them.

    All n! arrangements are gone through where they are at most 10 000 (n ≤ 7).

    Parameters
    ----------
    x, y : array_like, shape (n,)
    seed : int

    Returns
    -------
    test : PermutationTest
        The statistic is Spearman's rho. nan where one side is constant.
    """
    x, y = ranks(x), ranks(y)
    n = x.size
    if _is_constant(x) or _is_constant(y):
        return _undefined(n)
    exact = factorial(n) <= MOST_EXACT
    if exact:
        order = np.array(list(permutations(range(n))))
    else:
        order = np.random.default_rng(seed).permuted(np.tile(np.arange(n), (DRAWS, 1)), axis=1)
    return _two_sided(pearson(x, y), pearson(x, y[order]), exact, 1.0, n)


# Intervals by bootstrap


def mean(values: np.ndarray) -> np.ndarray:
    """Mean over the last axis: the usual statistic of a bootstrap."""
    return np.mean(values, axis=-1)


def mean_difference(first: np.ndarray, second: np.ndarray) -> np.ndarray:
    """Difference of the means over the last axis, first − second."""
    return mean(first) - mean(second)


def bca_interval(
    statistic: Callable[..., np.ndarray],
    *samples: np.ndarray,
    seed: int,
    paired: bool = True,
    confidence: float = CONFIDENCE,
    n_resamples: int = RESAMPLES,
) -> Interval:
    """Bias-corrected and accelerated bootstrap interval.

    Parameters
    ----------
    statistic : callable
        Takes as many arrays of shape (..., n) as there are samples and reduces their last axis.
    *samples : array_like, shape (n,)
        Of one length where paired.
    seed : int
    paired : bool
        Whether samples are measures of the same people, drawn together, or independent groups.
    confidence : float
    n_resamples : int

    Returns
    -------
    interval : Interval
        nan for a sample of one or none, for constant samples, and where the statistic itself or one
        with a value left out is undefined. Resamples on which it is undefined are left out.

    Raises
    ------
    DataError
        Missing values, or paired samples of unequal length.

    Notes
    -----
    Efron 1987, J Am Stat Assoc 82:171; for several samples Efron & Tibshirani 1993 (from memory).
    With fewer than about 20 values the interval is somewhat too narrow.
    """
    from scipy.special import ndtr, ndtri

    samples = [_finite(sample) for sample in samples]
    undefined = Interval(np.nan, np.nan)
    if paired and len({sample.size for sample in samples}) > 1:
        found = [sample.size for sample in samples]
        raise DataError(f"Paired samples must have one value each a person, found {found} values.")
    if min(sample.size for sample in samples) < 2 or all(map(_is_constant, samples)):
        return undefined
    rng = np.random.default_rng(seed)
    groups = [samples] if paired else [[sample] for sample in samples]
    sizes = [group[0].size for group in groups]
    draws = [rng.integers(0, size, (n_resamples, size)) for size in sizes]
    observed = statistic(*samples)
    resampled = _evaluate(statistic, groups, draws)
    resampled = resampled[np.isfinite(resampled)]
    left_out = _leave_one_out(statistic, groups)
    if not np.isfinite([observed, *np.concatenate(left_out)]).all():
        return undefined

    difference = _centred(resampled, observed)
    below = np.mean(difference < 0) + np.mean(difference == 0) / 2
    if not 0 < below < 1:
        return undefined
    pull = np.concatenate([(1 - 1 / v.size) * (v.mean() - v) for v in left_out])
    spread = np.sum(pull**2)
    acceleration = np.sum(pull**3) / (6 * spread**1.5) if spread > 0 else 0.0
    bias = ndtri(below)
    ends = bias + ndtri([(1 - confidence) / 2, (1 + confidence) / 2])
    levels = ndtr(bias + ends / (1 - acceleration * ends))
    return Interval(*np.quantile(resampled, levels).tolist())


def _evaluate(
    statistic: Callable[..., np.ndarray],
    groups: Sequence[Sequence[np.ndarray]],
    draws: Sequence[np.ndarray],
) -> np.ndarray:
    """Statistic of samples drawn by index; the samples of a group share their draws."""
    drawn = [sample[draw] for group, draw in zip(groups, draws, strict=True) for sample in group]
    return statistic(*drawn)


def _leave_one_out(
    statistic: Callable[..., np.ndarray], groups: Sequence[Sequence[np.ndarray]]
) -> list[np.ndarray]:
    """Statistic with each place of each group left out in turn."""
    results = []
    for chosen, group in enumerate(groups):
        size = group[0].size
        others = np.tile(np.arange(size), (size, 1))[~np.eye(size, dtype=bool)]
        draws = [
            others.reshape(size, size - 1)
            if place == chosen
            else np.tile(np.arange(whole[0].size), (size, 1))
            for place, whole in enumerate(groups)
        ]
        results.append(_evaluate(statistic, groups, draws))
    return results


# Effect sizes


def cohen_dz(differences: np.ndarray) -> float:
    """Mean of paired differences over their standard deviation; nan where nothing varies."""
    differences = _finite(differences)
    if differences.size < 2 or _is_constant(differences):
        return np.nan
    return float(differences.mean() / differences.std(ddof=1))


def hedges_correction(degrees_of_freedom: float) -> float:
    """Exact small-sample factor J = Γ(df/2) / (√(df/2)·Γ((df−1)/2)); nan below 2 df.

    Notes
    -----
    Hedges 1981, J Educ Stat 6:107.
    """
    from scipy.special import gammaln

    df = degrees_of_freedom
    if df < 2:
        return np.nan
    return float(np.exp(gammaln(df / 2) - gammaln((df - 1) / 2)) / np.sqrt(df / 2))


def hedges_gz(differences: np.ndarray) -> float:
    """d_z of paired differences times the exact correction for n − 1 degrees of freedom."""
    return cohen_dz(differences) * hedges_correction(np.size(differences) - 1)


def hedges_g(first: np.ndarray, second: np.ndarray) -> float:
    """Difference of two groups' means over their pooled deviation, times the exact correction.

    nan where a group is empty, fewer than 2 degrees of freedom are left, or nothing varies.
    """
    first, second = _finite(first), _finite(second)
    df = first.size + second.size - 2
    if min(first.size, second.size) == 0 or (_is_constant(first) and _is_constant(second)):
        return np.nan
    squares = sum(np.sum((group - group.mean()) ** 2) for group in (first, second))
    difference = first.mean() - second.mean()
    return float(difference / np.sqrt(squares / df) * hedges_correction(df))


def smallest_detectable_dz(n: int, power: float = 0.8, level: float = 0.05) -> float:
    """d_z that a two-sided paired t test of n people detects with the given power.

    From the noncentral t distribution with n − 1 degrees of freedom; nan for fewer than 2 people.
    """
    from scipy.optimize import brentq
    from scipy.special import fdtri, ncfdtr

    if n < 2:
        return np.nan
    df = n - 1
    critical = fdtri(1, df, 1 - level)  # t² follows F(1, df), which holds both tails

    def missing_power(noncentrality: float) -> float:
        return power - 1 + ncfdtr(1, df, noncentrality**2, critical)

    return float(brentq(missing_power, 0, 4 * np.sqrt(critical)) / np.sqrt(n))


# Families of tests


def holm(p: np.ndarray) -> np.ndarray:
    """Adjusted p values that control the error rate of the whole family.

    Parameters
    ----------
    p : array_like, shape (n,)
        nan, a test that could not be made, stays nan and does not count in the family.

    Notes
    -----
    Holm 1979, Scand J Stat 6:65.
    """
    return _adjust(p, lambda raised: np.maximum.accumulate(raised * np.arange(raised.size, 0, -1)))


def benjamini_hochberg(p: np.ndarray) -> np.ndarray:
    """Adjusted p values that control the false discovery rate; nan as in `holm`.

    Notes
    -----
    Benjamini & Hochberg 1995, J R Stat Soc B 57:289.
    """

    def adjust(raised: np.ndarray) -> np.ndarray:
        share = raised * raised.size / np.arange(1, raised.size + 1)
        return np.minimum.accumulate(share[::-1])[::-1]

    return _adjust(p, adjust)


def _adjust(p: np.ndarray, step: Callable[[np.ndarray], np.ndarray]) -> np.ndarray:
    """Apply a stepwise adjustment to the p values in rising order."""
    p = np.asarray(p, dtype=float)
    known = np.flatnonzero(~np.isnan(p))
    order = known[np.argsort(p[known], kind="stable")]
    adjusted = np.full(p.shape, np.nan)
    adjusted[order] = np.minimum(step(p[order]), 1)
    return adjusted


# Data quality


def measurement_error(values: np.ndarray) -> float:
    """Standardised measurement error of a mean over windows: SD / √K; nan below 2 windows.

    Notes
    -----
    Luck et al. 2021, Psychophysiology 58:e13793, with the sample's SD (K − 1).
    """
    values = _finite(values)
    return float(values.std(ddof=1) / np.sqrt(values.size)) if values.size > 1 else np.nan


def bootstrap_measurement_error(
    values: np.ndarray,
    statistic: Callable[[np.ndarray], np.ndarray],
    seed: int,
    n_resamples: int = 1000,
) -> np.ndarray:
    """Standardised measurement error of any score: its SD over resampled windows.

    Parameters
    ----------
    values : ndarray, real or complex, shape (n_windows, ...)
    statistic : callable
        Score of an array of that shape; a number or an array.
    seed : int
    n_resamples : int

    Returns
    -------
    error : ndarray, shape of the score
        nan below 2 windows.

    Notes
    -----
    Luck et al. 2021, Psychophysiology 58:e13793.
    """
    K = len(values)
    if K < 2:
        return np.full(np.shape(statistic(values)), np.nan)
    draws = np.random.default_rng(seed).integers(0, K, (n_resamples, K))
    return np.std([statistic(values[draw]) for draw in draws], axis=0, ddof=1)


def spearman_brown(r: float) -> float:
    """Reliability of the whole from the correlation of its halves, 2r / (1 + r)."""
    with np.errstate(divide="ignore"):
        return np.float64(2) * r / (1 + np.float64(r))


def split_half_reliability(first: np.ndarray, second: np.ndarray) -> float:
    """Reliability of a score over people, from its values in two halves of the windows.

    Parameters
    ----------
    first, second : array_like, shape (n_people,) or (n_people, n_splits)
        Where windows were split several times, correlations are averaged over the splits.

    Returns
    -------
    reliability : float
        Below zero the halves disagree. nan for fewer than 3 people, or where a half is constant.

    Notes
    -----
    Spearman 1910; Brown 1910, Br J Psychol 3 (from memory).
    """
    first, second = _finite(first).T, _finite(second).T
    if first.shape[-1] < 3:
        return np.nan
    return float(spearman_brown(np.mean(pearson(first, second))))
