"""Alpha and response together: within one person over windows, and over people."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from onbin.errors import DataError
from onbin.inference import (
    SAME,
    Interval,
    PermutationTest,
    RepeatedMeasuresCorrelation,
    bca_interval,
    complete,
    fisher_z,
    fisher_z_inverse,
    mean,
    partial_spearman,
    pearson,
    ranks,
    repeated_measures_correlation,
    sign_flip_test,
    spearman,
    within,
)

MIN_WINDOWS = 8
PERMUTATIONS = 2000


@dataclass(frozen=True)
class WindowRelation:
    """Relation of alpha and response over one person's windows.

    Attributes
    ----------
    rho : float
        Spearman's correlation of the deviations from each condition's mean.
    partial_rho : float
        The same with the window number, that is time on task, held constant.
    p : float
        Two-sided, of rho, from permutations of the trials within conditions.
    n_windows, n_left_out : int
        Windows used, and those that miss a value or stand alone in their condition.
    reason : str
        Why a figure is missing; empty where none is.
    """

    rho: float
    partial_rho: float
    p: float
    n_windows: int
    n_left_out: int
    reason: str


@dataclass(frozen=True)
class GroupRelation:
    """Relation over people.

    Attributes
    ----------
    mean_rho : float
        By the mean of Fisher's z.
    interval : Interval
        BCa bootstrap over people, of the same.
    test : PermutationTest
        Sign flips of the people's Fisher's z; its statistic is the mean z.
    n_people, n_left_out : int
        People used, and those without a correlation.
    """

    mean_rho: float
    interval: Interval
    test: PermutationTest
    n_people: int
    n_left_out: int


def _check_lengths(**columns: Sequence) -> None:
    lengths = {name: len(values) for name, values in columns.items()}
    if len(set(lengths.values())) > 1:
        raise DataError(
            f"Windows: one value a window is expected of each measure, found {lengths}."
        )


def window_relation(
    log_alpha: np.ndarray,
    amplitude_uv: np.ndarray,
    condition: Sequence[str],
    trial: Sequence,
    window_number: np.ndarray,
    seed: int,
    n_permutations: int = PERMUTATIONS,
) -> WindowRelation:
    """Relate alpha to the response over the windows of one person.

    Every measure is taken as its deviation from the mean of the window's condition, so that a
    difference between conditions in both does not pass for a relation.

    Parameters
    ----------
    log_alpha : array_like, shape (n_windows,)
        Logarithm of alpha power; nan where a window has none.
    amplitude_uv : array_like, shape (n_windows,)
        Single-window amplitude, projected on the response's phase; may be negative.
    condition : sequence of str, shape (n_windows,)
    trial : sequence, shape (n_windows,)
        Which windows belong to one trial.
    window_number : array_like, shape (n_windows,)
        Place in the recording.
    seed : int
    n_permutations : int

    Returns
    -------
    relation : WindowRelation
        nan with a reason below 8 windows, or where a measure does not vary.

    Notes
    -----
    Windows of one trial are alike, so trials are permuted, not windows: the responses of a trial go
    with the alpha of another one of the same condition and number of windows. A drift that alpha
    and response share over the recording makes rho and its p large: partial_rho tells.
    """
    _check_lengths(
        log_alpha=log_alpha,
        amplitude_uv=amplitude_uv,
        condition=condition,
        trial=trial,
        window_number=window_number,
    )
    label, trial = np.asarray(condition), np.asarray(trial)
    columns = np.array([log_alpha, amplitude_uv, window_number], dtype=float)
    kept = np.isfinite(columns).all(axis=0)
    names, count = np.unique(label[kept], return_counts=True)
    kept &= np.isin(label, names[count > 1])
    label, trial, columns = label[kept], trial[kept], columns[:, kept]
    n_windows, n_left_out = int(kept.sum()), int((~kept).sum())
    if n_windows < MIN_WINDOWS:
        reason = f"{n_windows} windows of at least {MIN_WINDOWS}"
        return WindowRelation(np.nan, np.nan, np.nan, n_windows, n_left_out, reason)

    alpha, amplitude, number = (within(column, label) for column in columns)
    rho = float(spearman(alpha, amplitude))
    if np.isnan(rho):
        reason = "alpha or the response does not vary within conditions"
        return WindowRelation(np.nan, np.nan, np.nan, n_windows, n_left_out, reason)
    partial_rho = float(partial_spearman(alpha, amplitude, number))
    order = _permuted_trials(label, trial, n_permutations, seed)
    permuted = pearson(ranks(alpha), ranks(amplitude)[order])
    extreme = int((np.abs(permuted) >= abs(rho) - SAME).sum())
    return WindowRelation(
        rho=rho,
        partial_rho=partial_rho,
        p=(extreme + 1) / (n_permutations + 1),
        n_windows=n_windows,
        n_left_out=n_left_out,
        reason="" if np.isfinite(partial_rho) else "time on task cannot be held constant",
    )


def _permuted_trials(
    label: np.ndarray, trial: np.ndarray, n_permutations: int, seed: int
) -> np.ndarray:
    """Orders of the windows, shape (n_permutations, n_windows): whole trials change places.

    Only trials of the same condition and number of windows do.
    """
    rng = np.random.default_rng(seed)
    alike: dict[tuple, list[np.ndarray]] = {}
    for name, number in sorted(set(zip(label.tolist(), trial.tolist(), strict=True))):
        places = np.flatnonzero((label == name) & (trial == number))
        alike.setdefault((name, places.size), []).append(places)
    order = np.empty((n_permutations, label.size), dtype=int)
    for trials in alike.values():
        places = np.stack(trials)
        draws = rng.permuted(np.tile(np.arange(len(places)), (n_permutations, 1)), axis=1)
        order[:, places.ravel()] = places[draws].reshape(n_permutations, -1)
    return order


def group_relation(rhos: np.ndarray, seed: int) -> GroupRelation:
    """Take the relations of single people to the group.

    Parameters
    ----------
    rhos : array_like, shape (n_people,)
        One correlation a person; nan where there is none.
    seed : int

    Returns
    -------
    relation : GroupRelation
    """
    (z,), n_left_out = complete(fisher_z(np.asarray(rhos, dtype=float)))
    test = sign_flip_test(z, seed)
    interval = bca_interval(mean, z, seed=seed)
    return GroupRelation(
        mean_rho=float(fisher_z_inverse(test.statistic)),
        interval=Interval(*fisher_z_inverse([interval.low, interval.high]).tolist()),
        test=test,
        n_people=test.n,
        n_left_out=n_left_out,
    )


def pooled_relation(
    person: Sequence[str],
    condition: Sequence[str],
    log_alpha: np.ndarray,
    amplitude_uv: np.ndarray,
) -> RepeatedMeasuresCorrelation:
    """Repeated-measures correlation over the windows of all people.

    Each person has a level of their own in each condition. Windows that miss a value are left out;
    `n_observations` tells how many took part. People with large amplitudes weigh more.

    Parameters
    ----------
    person, condition : sequence of str, shape (n_windows,)
    log_alpha, amplitude_uv : array_like, shape (n_windows,)
    """
    _check_lengths(
        person=person, condition=condition, log_alpha=log_alpha, amplitude_uv=amplitude_uv
    )
    pairs = list(zip(person, condition, strict=True))
    numbers = {pair: number for number, pair in enumerate(sorted(set(pairs)))}
    (cell, log_alpha, amplitude_uv), _ = complete(
        [numbers[pair] for pair in pairs], log_alpha, amplitude_uv
    )
    return repeated_measures_correlation(cell, log_alpha, amplitude_uv)


def alpha_halves(log_alpha: np.ndarray, condition: Sequence[str]) -> tuple[np.ndarray, np.ndarray]:
    """Split the windows of each condition into those with little and those with much alpha.

    Parameters
    ----------
    log_alpha : array_like, shape (n_windows,)
    condition : sequence of str, shape (n_windows,)

    Returns
    -------
    low, high : ndarray of bool, shape (n_windows,)
        Of equal number in every condition: the middle window of an odd number is in neither half,
        and so is one whose alpha is missing. Of equal values the earlier counts as lower.
    """
    _check_lengths(log_alpha=log_alpha, condition=condition)
    log_alpha, label = np.asarray(log_alpha, dtype=float), np.asarray(condition)
    low, high = np.zeros(label.shape, dtype=bool), np.zeros(label.shape, dtype=bool)
    for name in np.unique(label):
        places = np.flatnonzero((label == name) & np.isfinite(log_alpha))
        rising = places[np.argsort(log_alpha[places], kind="stable")]
        half = rising.size // 2
        low[rising[:half]] = True
        high[rising[rising.size - half :]] = True
    return low, high
