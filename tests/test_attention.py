"""Decisions on the attended tag: reference libraries, worked values, and simulated people."""

from fractions import Fraction

import numpy as np
import pytest
from onbin import attention, tagging
from scipy import stats

RATE_HZ, N_SAMPLES = 200, 500
TAGS = {"left": 14.4, "right": 18.0}
CONTRAST = attention.Contrast(("left", "right"), {"watch_left": "left", "watch_right": "right"})
HARMONICS = {"left": [1, 2], "right": [1, 2]}


def person(rng, gain, trials=10, windows=3, channels=6, amplitude_uv=1.5, common_uv=0.0):
    """Simulate windows of trials in which the attended tag is ``gain`` times as large.

    ``common_uv`` makes the windows of a trial alike: each trial has tags of its own strength.
    """
    t = np.arange(N_SAMPLES) / RATE_HZ
    maps = {tag: rng.normal(size=channels) for tag in TAGS}
    rows, signals = [], []
    for trial in range(2 * trials):
        condition = ("watch_left", "watch_right")[trial % 2]
        own_uv = {tag: amplitude_uv + common_uv * rng.normal() for tag in TAGS}
        for window in range(windows):
            signal_uv = 5 * rng.normal(size=(channels, N_SAMPLES))
            for tag, frequency_hz in TAGS.items():
                attended = CONTRAST.attended_in[condition] == tag
                wave = np.cos(2 * np.pi * frequency_hz * t + 0.7)
                signal_uv += own_uv[tag] * (gain if attended else 1) * np.outer(maps[tag], wave)
            signals.append(signal_uv)
            rows.append({"recording": "one", "trial": trial, "condition": condition})
            rows[-1] |= {"offset_s": 0.5 + 2.5 * window, "tags": TAGS}
    return rows, np.array(signals)


def rows_of(rows, signals, seed=1):
    return list(attention.contrast_rows(CONTRAST, HARMONICS, rows, signals, RATE_HZ, seed))


# --- what is compared -----------------------------------------------------------------------------


def condition(flickering, attended):
    return {"flickering": flickering, "attended": attended}


def test_only_conditions_with_the_same_flicker_and_another_attended_tag_are_compared():
    both = ["left", "right"]
    found = attention.contrasts(
        {
            "watch_left": condition(both, "left"),
            "watch_right": condition(both[::-1], "right"),
            "left_only": condition(["left"], "left"),
            "watch_nothing": condition(both, None),
            "rest": condition([], None),
        }
    )
    assert found == [CONTRAST]


def test_no_contrast_where_the_same_tag_is_attended():
    both = ["left", "right"]
    assert (
        attention.contrasts({"easy": condition(both, "left"), "hard": condition(both, "left")})
        == []
    )


def test_harmonics_that_tags_share_are_left_out():
    tags = {"slow": Fraction(6), "fast": Fraction(9)}
    found = attention.own_harmonics(tagging.harmonics(tags, 4), ["slow", "fast"], Fraction(1, 2))
    assert found == {"slow": [1, 2, 4], "fast": [1, 3, 4]}  # 18 Hz is 3 × 6 and 2 × 9


# --- canonical correlation ------------------------------------------------------------------------


def test_canonical_correlation_of_one_window_is_that_of_scikit_learn():
    from sklearn.cross_decomposition import CCA

    rng = np.random.default_rng(1)
    _, signals = person(rng, 1.0, trials=1, windows=1, channels=4)
    x = attention.detrended(signals[0])
    t = np.arange(N_SAMPLES) / RATE_HZ
    basis = attention.reference_basis(t, [14.4, 28.8])
    total, projected = attention.products(x[None]), (x @ basis)[None]
    weights = attention.spatial_filter(total[0], attention.products(projected)[0])
    (ours,) = attention.correlations(weights, total, projected)

    y = np.vstack([f(2 * np.pi * h * 14.4 * t) for h in (1, 2) for f in (np.cos, np.sin)])
    model = CCA(n_components=1, max_iter=10_000, tol=1e-14)
    theirs = np.corrcoef(*(v[:, 0] for v in model.fit_transform(x.T, attention.detrended(y).T)))
    assert ours == pytest.approx(theirs[0, 1], rel=1e-6)  # their solution is iterated


def test_an_empty_direction_does_not_matter():
    rng = np.random.default_rng(2)
    rows, signals = person(rng, 2.0)
    referenced = signals - signals.mean(axis=1, keepdims=True)
    repeated = np.concatenate([referenced, referenced[:, :1]], axis=1)
    first, second = rows_of(rows, referenced), rows_of(rows, repeated)
    assert first[0]["accuracy"] == pytest.approx(second[0]["accuracy"], abs=0.05)  # rescaled sum


def test_references_explain_their_own_sinusoid_and_nothing_on_other_bins():
    t = np.arange(N_SAMPLES) / RATE_HZ
    basis = attention.reference_basis(t, [14.4, 28.8])
    assert np.allclose(basis.T @ basis, np.eye(4), atol=1e-12)
    for frequency_hz, share in ((14.4, 1.0), (28.8, 1.0), (18.0, 0.0)):
        x = attention.detrended(np.cos(2 * np.pi * frequency_hz * t + 0.3))
        explained = ((x @ basis) ** 2).sum() / (x**2).sum()
        assert explained == pytest.approx(share, abs=1e-3)  # the trend couples bins a little


# --- decisions ------------------------------------------------------------------------------------


def test_discriminant_decides_as_that_of_scikit_learn():
    from sklearn.discriminant_analysis import LinearDiscriminantAnalysis

    rng = np.random.default_rng(3)
    labels = np.arange(90) % 3
    features = rng.normal(size=(90, 2)) + np.array([[0, 0], [1.5, 0], [0, 1.5]])[labels]
    training = np.arange(90) < 60  # equal numbers: theirs weights covariances by priors
    scores = attention.discriminant_scores(features, labels[None], training, 3)[0]
    model = LinearDiscriminantAnalysis(solver="lsqr", priors=[1 / 3] * 3)
    model.fit(features[training], labels[training])
    expected = model.predict_proba(features[~training])
    # their covariance divides by n, ours by n − labels; scores differ by that factor
    ours = np.exp(scores * 60 / 57)
    np.testing.assert_allclose(ours / ours.sum(axis=1, keepdims=True), expected, atol=1e-9)


def test_every_fold_has_every_label_and_no_trial_twice():
    labels = np.array([0, 1, 0, 0, 1, 1, 0, 1, 0, 0, 1, 0, 0])
    fold = attention.deal(labels)
    assert fold.max() + 1 == 5
    assert all(set(labels[fold == k]) == {0, 1} for k in range(5))


def test_permutation_keeps_folds_and_counts():
    labels = np.array([0, 1] * 8)
    fold = attention.deal(labels)
    drawn = attention.arrangements(labels, fold, 50, seed=1)
    assert np.array_equal(drawn[0], labels)
    assert (drawn[1:] != labels).any()
    for k in np.unique(fold):
        assert (np.sort(drawn[:, fold == k], axis=1) == np.sort(labels[fold == k])).all()


@pytest.mark.parametrize(("right", "n"), [(0, 12), (5, 12), (12, 12), (47, 60)])
def test_wilson_interval_is_that_of_scipy(right, n):
    expected = stats.binomtest(right, n).proportion_ci(method="wilson")
    found = attention.wilson_interval(right / n, n)
    np.testing.assert_allclose(found, expected, atol=1e-12)


@pytest.mark.parametrize(
    ("accuracy", "choices", "bits"),
    [(1.0, 2, 1.0), (1.0, 4, 2.0), (0.9, 2, 0.531), (0.9, 4, 1.373), (0.8, 2, 0.278),
     (0.5, 2, 0.0), (0.25, 4, 0.0), (0.3, 2, 0.0)],
)  # fmt: skip
def test_information_rate_of_wolpaw(accuracy, choices, bits):
    # Wolpaw et al. 2000: bits a decision, to three decimals (from memory); below chance 0 here
    assert attention.information_rate(accuracy, choices, 60) == pytest.approx(bits, abs=5e-4)
    assert attention.information_rate(accuracy, choices, 3) == pytest.approx(20 * bits, abs=1e-2)


def test_information_rate_is_mutual_information():
    # of a symmetric channel with equally frequent inputs (Shannon 1948): computed from its table
    for accuracy, choices in ((0.62, 2), (0.7, 3), (0.85, 5)):
        table = np.full((choices, choices), (1 - accuracy) / (choices - 1) / choices)
        np.fill_diagonal(table, accuracy / choices)
        bits = (table * np.log2(table * choices**2)).sum()
        assert attention.information_rate(accuracy, choices, 60) == pytest.approx(bits, rel=1e-12)


# --- simulated people -----------------------------------------------------------------------------


def test_attention_that_is_there_is_told():
    by_window, by_trial = rows_of(*person(np.random.default_rng(4), 1.6))
    assert (by_window["decision"], by_trial["decision"]) == ("window", "trial")
    assert (by_window["windows"], by_window["trials"]) == (60, 20)
    assert by_window["decision_s"] == 2.5
    assert by_trial["decision_s"] == 7.5
    assert by_window["accuracy"] > 0.8
    assert by_trial["accuracy"] >= by_window["accuracy"]
    assert by_window["accuracy_p"] < 0.01
    assert by_window["itr_bits_per_min"] == attention.information_rate(
        by_window["accuracy"], 2, 2.5
    )
    assert by_window["harmonics"] == "left 1f 2f, right 1f 2f"


def test_same_in_same_out():
    rows, signals = person(np.random.default_rng(5), 1.3)
    assert rows_of(rows, signals) == rows_of(rows, signals)


def test_too_few_trials_are_told():
    (row,) = rows_of(*person(np.random.default_rng(6), 2.0, trials=5))
    assert row["reason"] == "fewer than 6 trials of a tag: left attended in 5, right attended in 5"
    assert "accuracy" not in row
    (row,) = rows_of([], np.empty(0))
    assert "left attended in 0" in row["reason"]


def test_three_attended_tags():
    rng = np.random.default_rng(7)
    labels, trial = np.arange(24) % 3, np.repeat(np.arange(24), 2)
    fold = attention.deal(labels)
    features = rng.normal(size=(48, 3)) + 3 * np.eye(3)[labels[trial]]
    found, _ = attention.judge(np.stack([features] * 8), trial, labels, fold, 2.0, seed=1)
    assert found.chance == pytest.approx(1 / 3)
    assert found.accuracy > 0.85
    assert found.accuracy_p < 0.01


def null_people(n, permutations):
    """Accuracies and p of people without attention, whose windows of a trial are very alike."""
    rng = np.random.default_rng(8)
    found = []
    for _ in range(n):
        labels = rng.permutation(np.repeat([0, 1], [9, 8]))
        fold, trial = attention.deal(labels), np.repeat(np.arange(17), 3)
        features = 2 * rng.normal(size=(17, 2))[trial] + rng.normal(size=(51, 2))
        of_folds = np.stack([features] * (fold.max() + 1))
        found.append(attention.judge(of_folds, trial, labels, fold, 2.5, 1, permutations))
    return [[(d.accuracy, d.accuracy_p) for d in decisions] for decisions in found]


def check_null(n, permutations):
    found = np.array(null_people(n, permutations))
    for decision in range(2):
        accuracy, p = found[:, decision].T
        # guessing exactly: no leak by like windows, no lean away as with one trial left out
        assert accuracy.mean() == pytest.approx(0.5, abs=4 * accuracy.std() / np.sqrt(n))
        for level in (0.05, 0.01):
            # accuracies are coarse and often tied, which makes p careful
            assert np.sum(p <= level) <= stats.binom.isf(0.005, n, level)
    assert np.mean(found[:, 0, 1] <= 0.05) > 0.02  # by window 4.4 % of 10 000 people


def test_without_attention_decisions_are_guesses():
    check_null(300, 400)


@pytest.mark.long
def test_without_attention_decisions_are_guesses_in_many_people():
    check_null(2_000, 1_000)


def test_signals_without_attention_are_at_chance():
    # the whole way from signals, with windows of a trial alike and no attention
    rng, accuracies = np.random.default_rng(9), []
    for _ in range(40):
        rows, signals = person(rng, 1.0, trials=6, common_uv=0.5)
        accuracies.append(rows_of(rows, signals)[0]["accuracy"])
    assert np.mean(accuracies) == pytest.approx(0.5, abs=4 * np.std(accuracies) / np.sqrt(40))
