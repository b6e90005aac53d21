"""Which tag was attended, told from the strength of each tag's response: cross-validated decisions.

All tags flicker at once, so the decision is learned: spatial filters and discriminant come from the
training trials alone, and windows of one trial never stand on both sides.
"""

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np

from onbin.tagging import Term

FEWEST_TRIALS = 6  # of each tag: with fewer, p cannot fall below 5 % (a full swap is as good)
MOST_FOLDS = 10
PERMUTATIONS = 2000
CONFIDENCE = 0.95
RANK_TOLERANCE = 1e-8  # of the largest variance: below it a direction is empty (reference, splines)


@dataclass(frozen=True)
class Contrast:
    """Conditions in which the same tags flicker and different ones are attended.

    Attributes
    ----------
    flickering : tuple of str
        Tags that flicker.
    attended_in : dict of str to str
        Attended tag by condition.
    """

    flickering: tuple[str, ...]
    attended_in: dict[str, str]

    @property
    def attended(self) -> list[str]:
        """Tags that are told apart."""
        return sorted(set(self.attended_in.values()))


@dataclass(frozen=True)
class Decisions:
    """How well the attended tag was told, by one window or by all windows of a trial.

    Attributes
    ----------
    decision : str
        ``window`` or ``trial``.
    decision_s : float
        Signal that a decision rests on, on average.
    accuracy : float
        Mean over the attended tags of the share of right decisions.
    accuracy_low, accuracy_high : float
        Wilson's 95 % interval, with the trials as independent observations.
    chance : float
    accuracy_p : float
        One-sided, from permuted trials.
    itr_bits_per_min : float
    """

    decision: str
    decision_s: float
    accuracy: float
    accuracy_low: float
    accuracy_high: float
    chance: float
    accuracy_p: float
    itr_bits_per_min: float


def contrasts(conditions: Mapping[str, Mapping[str, Any]]) -> list[Contrast]:
    """Find the conditions between which the attended tag differs and the flicker does not.

    Parameters
    ----------
    conditions : mapping
        By name: ``flickering`` and ``attended``.
    """
    groups: dict[tuple[str, ...], dict[str, str]] = {}
    for name, about in conditions.items():
        if about["attended"]:
            groups.setdefault(tuple(sorted(about["flickering"])), {})[name] = about["attended"]
    return [
        Contrast(tags, attended_in)
        for tags, attended_in in sorted(groups.items())
        if len(set(attended_in.values())) > 1
    ]


def own_harmonics(
    terms: Iterable[Term], flickering: Sequence[str], width_hz: Fraction
) -> dict[str, list[int]]:
    """Harmonics of each flickering tag that lie a bin or more from those of the others.

    Parameters
    ----------
    terms : iterable of Term
    flickering : sequence of str
    width_hz : Fraction
        Width of a bin.
    """
    driven = [term for term in terms if term.harmonic and term.tag in flickering]
    return {
        tag: [
            term.harmonic
            for term in driven
            if term.tag == tag
            and all(abs(term.frequency - o.frequency) >= width_hz for o in driven if o.tag != tag)
        ]
        for tag in flickering
    }


# --- canonical correlation -----------------------------------------------------------------------


def detrended(values: np.ndarray) -> np.ndarray:
    """Take mean and linear trend out of the last axis."""
    n = np.arange(values.shape[-1])
    trend, _ = np.linalg.qr(np.vander(n - n.mean(), 2))
    return values - (values @ trend) @ trend.T


def reference_basis(times_s: np.ndarray, frequencies_hz: Sequence[float]) -> np.ndarray:
    """Orthonormal basis of sine-cosine references, shape (n_samples, 2·n_frequencies)."""
    phase = 2 * np.pi * np.outer(frequencies_hz, times_s)
    basis, _ = np.linalg.qr(detrended(np.vstack([np.cos(phase), np.sin(phase)])).T)
    return basis


def products(windows_uv: np.ndarray) -> np.ndarray:
    """Products of the channels with one another, shape (n_windows, n_channels, n_channels)."""
    return windows_uv @ windows_uv.transpose(0, 2, 1)


def spatial_filter(total: np.ndarray, explained: np.ndarray) -> np.ndarray:
    """Weights of the channels whose sum has the largest share that the references explain.

    Parameters
    ----------
    total, explained : ndarray, shape (n_channels, n_channels)
        Products of the channels, and of what the references explain of them, summed over windows.

    Returns
    -------
    weights : ndarray, shape (n_channels,)

    Notes
    -----
    For one window this is the canonical correlation of Lin et al. 2006, IEEE Trans Biomed Eng
    53:2610 (from memory); over several, one filter serves all and each has a phase of its own.
    """
    variances, directions = np.linalg.eigh(total)
    there = variances > RANK_TOLERANCE * variances[-1]
    whitening = directions[:, there] / np.sqrt(variances[there])
    _, rotation = np.linalg.eigh(whitening.T @ explained @ whitening)
    return whitening @ rotation[:, -1]


def correlations(weights: np.ndarray, total: np.ndarray, projected: np.ndarray) -> np.ndarray:
    """Multiple correlation of each window's filtered signal with its references.

    Parameters
    ----------
    weights : ndarray, shape (n_channels,)
    total : ndarray, shape (n_windows, n_channels, n_channels)
    projected : ndarray, shape (n_windows, n_channels, n_references)
        The channels on the basis of the references.

    Returns
    -------
    correlation : ndarray, shape (n_windows,)
    """
    explained = ((weights @ projected) ** 2).sum(axis=-1)
    return np.sqrt(explained / ((weights @ total) @ weights))


def fold_features(
    total: np.ndarray, projected: Mapping[str, np.ndarray], fold: np.ndarray
) -> np.ndarray:
    """Each window's correlation with each tag, by filters from the windows outside of a fold.

    Parameters
    ----------
    total : ndarray, shape (n_windows, n_channels, n_channels)
    projected : mapping of str to ndarray, shape (n_windows, n_channels, n_references)
        By tag.
    fold : ndarray of int, shape (n_windows,)

    Returns
    -------
    features : ndarray, shape (n_folds, n_windows, n_tags)
        No label goes into them.
    """
    explained = {tag: products(values) for tag, values in projected.items()}
    return np.stack(
        [
            np.stack(
                [
                    correlations(
                        spatial_filter(
                            total[fold != k].sum(axis=0), explained[tag][fold != k].sum(axis=0)
                        ),
                        total,
                        values,
                    )
                    for tag, values in projected.items()
                ],
                axis=-1,
            )
            for k in range(fold.max() + 1)
        ]
    )


# --- decisions -----------------------------------------------------------------------------------


def deal(labels: np.ndarray) -> np.ndarray:
    """Deal the trials of each label to folds in turn, so that every fold has every label.

    Only then is the expected accuracy without an effect exactly chance: with one trial left out,
    the means of the others lean away from it.

    Parameters
    ----------
    labels : ndarray of int, shape (n_trials,)
        In the order of recording.

    Returns
    -------
    fold : ndarray of int, shape (n_trials,)
    """
    n_folds = min(min(np.bincount(labels)), MOST_FOLDS)
    fold = np.empty(len(labels), dtype=int)
    for label in np.unique(labels):
        own = np.flatnonzero(labels == label)
        fold[own] = np.arange(len(own)) % n_folds
    return fold


def discriminant_scores(
    features: np.ndarray, labels: np.ndarray, training: np.ndarray, n_labels: int
) -> np.ndarray:
    """Scores of the other windows by a linear discriminant of the training windows.

    Parameters
    ----------
    features : ndarray, shape (n_windows, n_features)
    labels : ndarray of int, shape (n_draws, n_windows)
        One arrangement of the labels a row.
    training : ndarray of bool, shape (n_windows,)
    n_labels : int

    Returns
    -------
    scores : ndarray, shape (n_draws, n_others, n_labels)
        The largest decides; all labels are taken as equally probable beforehand.

    Notes
    -----
    Fisher 1936, Ann Eugen 7:179 (from memory): one covariance for all labels.
    """
    known, asked = features[training], features[~training]
    is_label = (labels[:, training, None] == np.arange(n_labels)).astype(float)
    counts = is_label.sum(axis=1)
    means = is_label.transpose(0, 2, 1) @ known / counts[..., None]
    between = (means * counts[..., None]).transpose(0, 2, 1) @ means
    covariance = (known.T @ known - between) / (len(known) - n_labels)
    weights = means @ np.linalg.pinv(covariance, hermitian=True)
    return asked @ weights.transpose(0, 2, 1) - (weights * means).sum(axis=-1)[:, None] / 2


def balanced_accuracy(decided: np.ndarray, labels: np.ndarray, n_labels: int) -> np.ndarray:
    """Mean over labels of the share of right decisions, for each row."""
    return np.mean(
        [
            ((decided == label) & (labels == label)).sum(axis=-1) / (labels == label).sum(axis=-1)
            for label in range(n_labels)
        ],
        axis=0,
    )


def arrangements(labels: np.ndarray, fold: np.ndarray, draws: int, seed: int) -> np.ndarray:
    """Labels of the trials as they are, and ``draws`` times permuted within folds, by row.

    Since trials of a fold lie near in time, and their number by label stays, slow drift does not
    pass for an effect.
    """
    rng = np.random.default_rng(seed)
    drawn = np.tile(labels, (draws + 1, 1))
    for k in np.unique(fold):
        own = np.flatnonzero(fold == k)
        drawn[1:, own] = rng.permuted(drawn[1:, own], axis=1)
    return drawn


def judge(
    features: np.ndarray,
    trial: np.ndarray,
    labels: np.ndarray,
    fold: np.ndarray,
    window_s: float,
    seed: int,
    permutations: int = PERMUTATIONS,
) -> list[Decisions]:
    """Decide for each window, and for each trial by the sum of its windows' scores.

    Parameters
    ----------
    features : ndarray, shape (n_folds, n_windows, n_features)
        From `fold_features`.
    trial : ndarray of int, shape (n_windows,)
        Place of the window's trial among the trials.
    labels, fold : ndarray of int, shape (n_trials,)
        What was attended, and the fold.
    window_s : float
    seed : int
    permutations : int

    Returns
    -------
    list of Decisions
        By window and by trial.
    """
    n_labels, n_trials = labels.max() + 1, len(labels)
    of_trials = arrangements(labels, fold, permutations, seed)
    of_windows = of_trials[:, trial]
    scores = np.empty((*of_windows.shape, n_labels))
    for k, of_fold in enumerate(features):
        training = fold[trial] != k
        scores[:, ~training] = discriminant_scores(of_fold, of_windows, training, n_labels)
    membership = (trial == np.arange(n_trials)[:, None]).astype(float)
    trial_scores = membership @ scores
    return [
        _decisions("window", window_s, scores, of_windows, n_trials),
        _decisions("trial", window_s * len(trial) / n_trials, trial_scores, of_trials, n_trials),
    ]


def _decisions(
    decision: str, seconds: float, scores: np.ndarray, labels: np.ndarray, n_trials: int
) -> Decisions:
    n_labels = scores.shape[-1]
    accuracy, *permuted = balanced_accuracy(scores.argmax(axis=-1), labels, n_labels)
    as_good = np.sum(np.array(permuted) >= accuracy - 1e-12)
    low, high = wilson_interval(accuracy, n_trials)
    return Decisions(
        decision=decision,
        decision_s=seconds,
        accuracy=float(accuracy),
        accuracy_low=low,
        accuracy_high=high,
        chance=1 / n_labels,
        accuracy_p=float((1 + as_good) / (1 + len(permuted))),
        itr_bits_per_min=information_rate(accuracy, n_labels, seconds),
    )


def wilson_interval(share: float, n: int, confidence: float = CONFIDENCE) -> tuple[float, float]:
    """Interval of a share of n independent observations (Wilson 1927, J Am Stat Assoc 22:209)."""
    from scipy.special import ndtri

    z = ndtri((1 + confidence) / 2)
    centre = (share + z**2 / (2 * n)) / (1 + z**2 / n)
    half = z / (1 + z**2 / n) * np.sqrt(share * (1 - share) / n + z**2 / (4 * n**2))
    return float(max(centre - half, 0)), float(min(centre + half, 1))


def information_rate(accuracy: float, choices: int, seconds: float) -> float:
    """Information transfer rate in bits a minute, 0 where accuracy is not above chance.

    Notes
    -----
    B = log2 N + P·log2 P + (1 − P)·log2((1 − P)/(N − 1)) bits a decision (Wolpaw et al. 2000, IEEE
    Trans Rehabil Eng 8:164, from memory), which takes choices as equally frequent and errors as
    equally spread. Time between windows is not counted.
    """
    if accuracy <= 1 / choices:
        return 0.0
    wrong = 1 - accuracy
    spread = wrong * np.log2(wrong / (choices - 1)) if wrong > 0 else 0.0
    bits = np.log2(choices) + accuracy * np.log2(accuracy) + spread
    return float(bits * 60 / seconds)


# --- one contrast --------------------------------------------------------------------------------


def contrast_rows(
    contrast: Contrast,
    harmonics: Mapping[str, Sequence[int]],
    windows: Sequence[Mapping[str, Any]],
    windows_uv: np.ndarray,
    rate_hz: float,
    seed: int,
) -> Iterator[dict[str, Any]]:
    """Rows of one participant: decisions by window and by trial, or why there are none.

    Parameters
    ----------
    contrast : Contrast
    harmonics : mapping
        Of each flickering tag, those that make its references.
    windows : sequence of mapping
        In the order of recording: ``recording``, ``trial``, ``condition``, ``offset_s`` and
        ``tags``, the frequencies in Hz of the tags in that recording.
    windows_uv : ndarray, shape (n_windows, n_channels, n_samples)
    rate_hz : float
    seed : int
    """
    trials = {(w["recording"], w["trial"]): contrast.attended_in[w["condition"]] for w in windows}
    count = {tag: list(trials.values()).count(tag) for tag in contrast.attended}
    about = {
        "attended_tags": ", ".join(contrast.attended),
        "conditions": ", ".join(contrast.attended_in),
        "harmonics": ", ".join(
            f"{tag} {' '.join(f'{h}f' for h in of_tag) or 'none'}"
            for tag, of_tag in harmonics.items()
        ),
        "windows": len(windows),
        "trials": len(trials),
    }
    few = {tag: n for tag, n in count.items() if n < FEWEST_TRIALS}
    if few:
        told = ", ".join(f"{tag} attended in {n}" for tag, n in few.items())
        yield about | {"reason": f"fewer than {FEWEST_TRIALS} trials of a tag: {told}"}
        return
    labels = np.array([contrast.attended.index(tag) for tag in trials.values()])
    places = {key: place for place, key in enumerate(trials)}
    trial = np.array([places[w["recording"], w["trial"]] for w in windows])
    fold = deal(labels)
    times_s = np.arange(windows_uv.shape[-1]) / rate_hz
    level_uv = detrended(windows_uv)
    projected = {
        tag: np.stack(
            [
                window_uv @ reference_basis(times_s, [h * float(w["tags"][tag]) for h in of_tag])
                for window_uv, w in zip(level_uv, windows, strict=True)
            ]
        )
        for tag, of_tag in harmonics.items()
        if of_tag
    }
    features = fold_features(products(level_uv), projected, fold[trial])
    for decisions in judge(features, trial, labels, fold, windows_uv.shape[-1] / rate_hz, seed):
        yield about | vars(decisions)
