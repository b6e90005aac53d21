import dataclasses
import json

import mne
import numpy as np
import pytest
from onbin import arrays
from onbin.components import (
    CLASSES,
    ComponentLimits,
    Evidence,
    Separation,
    activity,
    artifact_correlations,
    fit_components,
    judge_components,
    label_components,
    remove_components,
    tag_shares,
    variance_shares,
)
from onbin.sensors import interpolate_and_reference
from test_sensors import SAMPLING_HZ, simulate

LIMITS = ComponentLimits(
    dict.fromkeys(("eye", "muscle", "heart", "channel noise"), 0.9), max_tag_share=0.1
)
TAG_HZ = 12.0


@pytest.fixture(scope="module")
def simulated():
    return simulate(24, 1, duration_s=120, tag_hz=TAG_HZ)


@pytest.fixture(scope="module")
def referenced(simulated):
    return interpolate_and_reference(simulated.raw(simulated.filtered_uv()), [], "average")


@pytest.fixture(scope="module")
def fit(referenced):
    return fit_components(referenced.raw, referenced.rank)


@pytest.fixture(scope="module")
def separation(fit):
    return Separation.of(fit.ica)


@pytest.fixture(scope="module")
def verdicts(referenced, fit, separation):
    data_uv = referenced.raw.get_data() * 1e6
    maps, unmixing = separation.maps, separation.unmixing
    probabilities, _ = label_components(referenced.raw, fit.ica)
    shares = tag_shares(data_uv, maps, unmixing, SAMPLING_HZ, [[TAG_HZ, 2 * TAG_HZ]])
    variance = variance_shares(data_uv, maps, unmixing)
    return judge_components(probabilities, shares, variance, LIMITS)


def rms(signal):
    return np.sqrt(np.mean(signal**2))


def probabilities_of(**chances):
    """One row of class probabilities, the rest going to `other`."""
    row = np.zeros(len(CLASSES))
    for label, chance in chances.items():
        row[CLASSES.index(label)] = chance
    row[-1] += 1 - row.sum()
    return row


# -------------------------------------------------------------------------------------- the fit


def test_as_many_components_as_the_rank(fit):
    assert fit.ica.n_components_ == 23
    assert fit.n_samples == 120 * 100


def test_interpolated_channels_lower_the_rank(simulated):
    referenced = interpolate_and_reference(
        simulated.raw(simulated.filtered_uv()), ["F3", "P8"], "average"
    )
    short = referenced.raw.crop(0, 20)
    fit = fit_components(short, referenced.rank)
    assert fit.ica.n_components_ == 21
    # 20 s at 100 Hz over 21²: the known rule of 20 samples a weight (common practice).
    assert any("2000 samples for 21 components, 4.5 a weight" in note for note in fit.notes)


@pytest.mark.parametrize("method", ["infomax", "fastica"])
def test_other_methods(referenced, method):
    chosen = referenced.raw.copy().crop(0, 30).pick(referenced.raw.ch_names[:10])
    fit = fit_components(chosen, 10, method)
    assert fit.ica.method == method
    assert fit.ica.n_components_ == 10


def test_same_seed_same_components(referenced):
    chosen = referenced.raw.copy().crop(0, 20).pick(referenced.raw.ch_names[:8])
    first, second = (fit_components(chosen, 8, seed=3) for _ in range(2))
    np.testing.assert_array_equal(first.ica.unmixing_matrix_, second.ica.unmixing_matrix_)


def test_a_reference_that_nobody_told_of_is_noticed(referenced):
    chosen = referenced.raw.copy().crop(0, 30).pick(referenced.raw.ch_names[:10])
    fit = fit_components(chosen.set_eeg_reference("average", verbose="error"), 10)
    assert fit.ica.n_components_ == 9
    assert "9 independent channels where 10 were expected" in fit.notes


def test_too_few_channels_have_no_components():
    few = simulate(3, 1)
    fit = fit_components(few.raw(few.filtered_uv()), 3)
    assert fit.ica is None
    assert fit.notes == ("3 EEG channels are too few to separate sources: no components",)


def test_gross_stretches_stay_out_of_the_fit(referenced):
    chosen = referenced.raw.copy().crop(0, 40).pick(referenced.raw.ch_names[:8])
    chosen._data[:, 2000:2400] += 5e-3 * np.random.default_rng(0).standard_normal((8, 400))
    fit = fit_components(chosen, 8)
    # 2 s, and the stretches on either side that the high-pass carries a little of it into.
    assert fit.n_samples == (40 - 6) * 100
    assert "6 s with gross artifacts stayed out of the fit" in fit.notes


# ------------------------------------------------------------------------- matrices and removal


def test_matrices_give_the_sources_of_mne(referenced, fit, separation):
    np.testing.assert_allclose(separation.unmixing @ separation.maps, np.eye(23), atol=1e-8)
    data = referenced.raw.get_data()
    mean = fit.ica.pca_mean_[:, None] * fit.ica.pre_whitener_
    sources = fit.ica.get_sources(referenced.raw).get_data()
    np.testing.assert_allclose(separation.unmixing @ (data - mean), sources, atol=1e-8)


def test_full_removal_equals_what_mne_removes(referenced, fit, separation):
    by_mne = fit.ica.apply(referenced.raw.copy(), exclude=[0, 4], verbose="error").get_data()
    ours = separation.removal([0, 4], [1, 1]) @ referenced.raw.get_data()
    # The fit's own mean is put back by mne: a constant, which no window keeps.
    difference = ours - by_mne
    np.testing.assert_allclose(difference, difference[:, :1].repeat(ours.shape[1], 1), atol=1e-14)


def test_removal_takes_a_component_out_where_it_is_active(referenced, separation):
    before_uv = referenced.raw.get_data() * 1e6
    sources = separation.unmixing @ before_uv
    blinks = int(np.argmax(np.mean(sources**4, axis=1) / np.mean(sources**2, axis=1) ** 2))
    cleaned_uv, gates = remove_components(before_uv, separation, {blinks: "eye"}, SAMPLING_HZ)
    assert gates.shape == (1, before_uv.shape[1])
    assert gates.min() == 0
    assert gates.max() == 1
    np.testing.assert_array_equal(cleaned_uv[:, gates[0] == 0], before_uv[:, gates[0] == 0])
    whole = separation.removal([blinks], [1]) @ before_uv
    np.testing.assert_allclose(
        cleaned_uv[:, gates[0] == 1], whole[:, gates[0] == 1], atol=1e-9
    )  # µV
    assert np.abs(sources[blinks, gates[0] == 0]).max() < np.abs(sources[blinks]).max() / 3


def test_a_steady_component_is_taken_out_everywhere():
    noise = np.random.default_rng(0).standard_normal((1, 5000))
    np.testing.assert_array_equal(activity(noise, SAMPLING_HZ, [False]), 1)
    by_nature_passing = activity(noise, SAMPLING_HZ, [True])
    assert by_nature_passing.mean() < 0.1  # 4 sd of noise: one sample in 16 000


def test_removing_nothing_changes_nothing(referenced):
    before_uv = referenced.raw.get_data() * 1e6
    same_uv, gates = remove_components(
        before_uv, Separation.none(referenced.raw.ch_names), {}, SAMPLING_HZ
    )
    np.testing.assert_array_equal(same_uv, before_uv)
    assert gates.shape == (0, before_uv.shape[1])


# ---------------------------------------------------------------------------- labels and evidence


def test_classes_stand_in_the_order_of_iclabel():
    from mne_icalabel.config import ICA_LABELS_TO_MNE

    theirs = [label.lower() for label in ICA_LABELS_TO_MNE]
    assert theirs == list(CLASSES)


def test_labels_are_probabilities_and_say_what_differs(referenced, fit):
    probabilities, notes = label_components(referenced.raw, fit.ica)
    assert probabilities.shape == (23, 7)
    np.testing.assert_allclose(probabilities.sum(axis=1), 1, atol=1e-5)  # single precision
    assert "sampled at 200 Hz, ICLabel was trained at 250 Hz and above" in notes
    assert not any("average reference" in note for note in notes)
    again, _ = label_components(referenced.raw, fit.ica)
    np.testing.assert_array_equal(again, probabilities)


def test_without_positions_nothing_is_labelled(referenced, fit):
    bare = referenced.raw.copy()
    bare.set_montage(None)
    probabilities, notes = label_components(bare, fit.ica)
    assert np.isnan(probabilities).all()
    assert notes == ("some channels have no position: components cannot be labelled",)
    verdicts = judge_components(probabilities, np.zeros((23, 1)), np.ones(23), LIMITS)
    assert {verdict.reason for verdict in verdicts} == {"not labelled"}


def test_artifacts_go_and_the_response_stays(simulated, separation, verdicts):
    removed = [verdict.component for verdict in verdicts if verdict.verdict == "removed"]
    assert {verdicts[component].label for component in removed} >= {"eye"}
    matrix = separation.removal(removed, np.ones(len(removed)))
    eyes, tag = (
        part - part.mean(axis=0) for part in (simulated.parts_uv["eyes"], simulated.parts_uv["tag"])
    )
    front = [simulated.names.index(name) for name in ("Fp1", "Fpz", "Fp2")]
    back = [simulated.names.index(name) for name in ("O1", "Oz", "O2")]
    eyes = eyes - eyes.mean(axis=1, keepdims=True)
    assert rms((matrix @ eyes)[front]) < rms(eyes[front]) / 10
    np.testing.assert_allclose(rms((matrix @ tag)[back]) / rms(tag[back]), 1, atol=0.02)


def test_correlation_with_eye_and_heart_channels(simulated, referenced, separation):
    assert artifact_correlations(referenced.raw, separation) == {}
    eog_uv = simulated.parts_uv["eyes"][simulated.names.index("Fp1")]
    info = mne.create_info(["EOG"], SAMPLING_HZ, "eog")
    eog = mne.io.RawArray(eog_uv[None] * 1e-6, info, verbose="error")
    both = referenced.raw.copy().add_channels([eog], force_update_info=True)
    found = artifact_correlations(both, separation)
    assert set(found) == {"eye"}
    assert found["eye"].max() > 0.9
    assert np.sort(found["eye"])[-4] < 0.5  # blinks and gaze are two or three components


def test_tag_shares_of_known_sources():
    rng = np.random.default_rng(0)
    times_s = np.arange(int(120 * SAMPLING_HZ)) / SAMPLING_HZ
    sources = rng.standard_normal((4, times_s.size))
    sources[3] = 5 * rng.standard_normal(times_s.size).cumsum() / np.sqrt(SAMPLING_HZ)
    tag = np.cos(2 * np.pi * 7.5 * times_s)
    sources[0] += 2 * tag
    sources[1] += tag
    maps = np.array([[1.0, 0.0, 0, 0], [0, 2.0, 0, 0], [0, 0, 1.0, 0], [0, 1.0, 0, 5.0]])
    of_data = (maps @ sources, maps, np.linalg.inv(maps))
    shares = tag_shares(*of_data, SAMPLING_HZ, [[7.5], [17.0]])
    # Powers 2² · 1 and 1² · (2² + 1²): shares 4/9 and 5/9, 5 % for the noise.
    np.testing.assert_allclose(shares[:, 0], [4 / 9, 5 / 9, 0, 0], atol=0.05)
    np.testing.assert_array_equal(shares[:, 1], 0)
    # Over both harmonics of one tag: the second, which is not there, changes little.
    (together,) = tag_shares(*of_data, SAMPLING_HZ, [[7.5, 15.0]]).T
    np.testing.assert_allclose(together, shares[:, 0], atol=0.05)


def test_variance_shares_of_known_sources():
    rng = np.random.default_rng(1)
    sources = np.linalg.qr(rng.standard_normal((5000, 2)))[0].T
    sources -= sources.mean(axis=1, keepdims=True)
    maps = np.array([[3.0, 0.0], [0.0, 1.0]])
    shares = variance_shares(maps @ sources, maps, np.linalg.inv(maps))
    np.testing.assert_allclose(shares, [0.9, 0.1], atol=1e-3)


# ----------------------------------------------------------------------------------- verdicts


@pytest.mark.parametrize(
    ("chances", "share", "verdict", "flagged", "reason"),
    [
        ({"eye": 0.95}, 0.02, "removed", False, "eye with probability 0.95"),
        ({"eye": 0.89}, 0.0, "kept", False, "no class to remove is likely enough"),
        ({"brain": 0.99}, 0.9, "kept", False, "no class to remove is likely enough"),
        ({"line noise": 0.99}, 0.0, "kept", False, "no class to remove is likely enough"),
        ({"muscle": 0.95}, 0.3, "kept", True, "muscle with probability 0.95, but carries 30 %"),
        ({"muscle": 0.95}, 0.1, "removed", False, "muscle with probability 0.95"),
    ],
)
def test_verdicts(chances, share, verdict, flagged, reason):
    (judged,) = judge_components(
        probabilities_of(**chances)[None], np.array([[0.0, share]]), np.ones(1), LIMITS
    )
    assert (judged.verdict, judged.flagged) == (verdict, flagged)
    assert judged.reason.startswith(reason)
    assert judged.largest_tag_share == share
    json.dumps(dataclasses.asdict(judged))


def test_correlation_removes_where_its_class_is_removed():
    arguments = (probabilities_of(other=1.0)[None], np.zeros((1, 1)), np.ones(1))
    correlations = {"eye": np.array([0.8]), "heart": np.array([0.3])}
    (judged,) = judge_components(*arguments, LIMITS, correlations)
    assert judged.verdict == "removed"
    assert judged.reason == "correlates 0.80 with a channel of the eye"
    (judged,) = judge_components(*arguments, ComponentLimits({"muscle": 0.8}, 0.1), correlations)
    assert judged.verdict == "kept"


# ------------------------------------------------------------------------- decisions, and sparing


def evidence_of(tag_share, eye=0.95):
    n = len(tag_share)
    return Evidence(
        separation=Separation(np.eye(n), np.eye(n), np.array([f"E{i}" for i in range(n)])),
        probabilities=np.tile(probabilities_of(eye=eye), (n, 1)),
        eye_correlation=np.full(n, np.nan),
        heart_correlation=np.full(n, np.nan),
        variance_share=np.full(n, 1 / n),
        tag=np.array(["left", "right"]),
        tag_share=np.array(tag_share),
    )


def told(verdict):
    return {"verdict": verdict, "told": "looked at (decided by RK)", "item": "x"}


def test_a_person_decides_over_the_tool():
    evidence = evidence_of([[0.0, 0.0], [0.5, 0.0], [0.0, 0.0]])
    first, second, third = evidence.judge(LIMITS, {})
    assert (first.verdict, second.verdict, second.flagged) == ("removed", "kept", True)
    decided = {"0 E0": told("keep"), "1 E1": told("remove")}
    first, second, third = evidence.judge(LIMITS, decided)
    assert (first.verdict, second.verdict, second.flagged) == ("kept", "removed", False)
    assert first.reason.startswith("looked at (decided by RK)")
    assert third.verdict == "removed"
    assert third.reason == "eye with probability 0.95"


def test_what_takes_most_of_a_harmed_tag_is_spared_unless_a_person_removes_it():
    evidence = evidence_of([[0.04, 0.00], [0.01, 0.08], [0.05, 0.02]])
    judged = evidence.judge(LIMITS, {})
    assert evidence.spare(judged, [], {}) is None
    spared = evidence.spare(judged, ["left"], {})
    assert [v.verdict for v in spared] == ["removed", "removed", "kept"]
    assert spared[2].flagged
    assert "takes part of the response at left" in spared[2].reason
    assert [v.verdict for v in evidence.spare(judged, ["left+right"], {})][1] == "kept"
    decided = {"2 E2": told("remove")}
    spared = evidence.spare(evidence.judge(LIMITS, decided), ["left"], decided)
    assert [v.verdict for v in spared] == ["kept", "removed", "removed"]
    everything = {f"{i} E{i}": told("remove") for i in range(3)}
    assert evidence.spare(evidence.judge(LIMITS, everything), ["left"], everything) is None


def test_evidence_survives_its_file(tmp_path):
    evidence = evidence_of([[0.04, 0.00], [0.01, 0.08]])
    arrays.write(tmp_path / "ica.npz", **evidence.arrays())
    back = Evidence.of(arrays.read(tmp_path / "ica.npz"))
    assert str(back.rows()) == str(evidence.rows())
    assert back.separation.items == ["0 E0", "1 E1"]
    row = back.rows()[0]
    assert (row["peak_channel"], row["component_class"], row["eye_p"]) == ("E0", "eye", 0.95)
    assert row["tag_shares"] == "left 0.040; right 0.000"
    assert Evidence.none(["Oz"]).rows() == []
