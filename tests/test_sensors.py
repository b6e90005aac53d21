import dataclasses
import json
from functools import cache

import mne
import numpy as np
import pytest
from onbin.errors import DataError
from onbin.filtering import apply_fir, design_highpass, design_lowpass
from onbin.sensors import (
    SensorLimits,
    interpolate_and_reference,
    judge_channels,
    sphere_centre,
    spline_weights,
)

SAMPLING_HZ = 200.0
# fmt: off
CAPS = {
    3: ["O1", "Oz", "O2"],
    16: ["Fp1", "Fp2", "F3", "Fz", "F4", "C3", "Cz", "C4", "P7", "P3", "Pz", "P4", "P8", "O1", "Oz",
         "O2"],
    24: ["Fp1", "Fpz", "Fp2", "F7", "F3", "Fz", "F4", "F8", "T7", "C3", "Cz", "C4", "T8", "CPz",
         "P7", "P3", "Pz", "P4", "P8", "PO7", "PO8", "O1", "Oz", "O2"],
}
# fmt: on
FAULTS = ("flat", "saturated", "drop-outs", "jumps", "large", "noise", "loose")


# ------------------------------------------------------------------------------ simulated heads


@cache
def head():
    """Names, positions, lead field (channels, dipoles, 3), dipole positions; last two: the eyes."""
    montage = mne.channels.make_standard_montage("biosemi64")
    info = mne.create_info(montage.ch_names, SAMPLING_HZ, "eeg")
    info.set_montage(montage)
    sphere = mne.make_sphere_model((0, 0, 0), head_radius=0.095, verbose="error")
    rng = np.random.default_rng(0)
    directions = rng.standard_normal((600, 3))
    directions /= np.linalg.norm(directions, axis=1, keepdims=True)
    dipoles_m = directions * 0.066 * rng.uniform(0.4, 1, (600, 1)) ** (1 / 3)
    dipoles_m = dipoles_m[dipoles_m[:, 2] > -0.03]
    dipoles_m = np.vstack([dipoles_m, [[-0.03, 0.07, -0.01], [0.03, 0.07, -0.01]]])
    space = mne.setup_volume_source_space(
        pos={"rr": dipoles_m, "nn": np.tile([0.0, 0.0, 1.0], (len(dipoles_m), 1))},
        sphere=sphere,
        sphere_units="m",
        verbose="error",
    )
    forward = mne.make_forward_solution(
        info, None, space, sphere, meg=False, eeg=True, mindist=0, verbose="error"
    )
    positions_m = np.array([montage.get_positions()["ch_pos"][name] for name in info.ch_names])
    lead_field = forward["sol"]["data"].reshape(len(info.ch_names), len(dipoles_m), 3)
    return info.ch_names, positions_m, lead_field, dipoles_m


def pink(rng, n_sources, n_times):
    """Noise of unit variance whose amplitude falls as 1/f above 0.5 Hz."""
    frequencies_hz = np.fft.rfftfreq(n_times, 1 / SAMPLING_HZ)
    shape = (n_sources, frequencies_hz.size)
    spectrum = rng.standard_normal(shape) + 1j * rng.standard_normal(shape)
    signal = np.fft.irfft(spectrum / np.maximum(frequencies_hz, 0.5), n_times)
    return signal / signal.std(axis=1, keepdims=True)


@dataclasses.dataclass
class Simulated:
    """A recording (as recorded, µV, with offsets and drift), and what it is made of."""

    names: list
    positions_m: np.ndarray
    recorded_uv: np.ndarray
    parts_uv: dict

    def filtered_uv(self):
        filtered = apply_fir(self.recorded_uv, design_highpass(SAMPLING_HZ, 1).taps)
        return apply_fir(filtered, design_lowpass(SAMPLING_HZ, 45).taps)

    def raw(self, data_uv):
        montage = mne.channels.make_dig_montage(
            dict(zip(self.names, self.positions_m, strict=True)), coord_frame="head"
        )
        info = mne.create_info(self.names, SAMPLING_HZ, "eeg")
        raw = mne.io.RawArray(data_uv * 1e-6, info, verbose="error")
        return raw.set_montage(montage)

    def judge(self, limits=None):
        return judge_channels(
            self.filtered_uv(),
            self.names,
            SAMPLING_HZ,
            self.positions_m,
            limits or SensorLimits(),
            seed=0,
            recorded_uv=self.recorded_uv,
        )


def simulate(n_channels, seed, duration_s=60, alpha_uv=None, tag_hz=12.0):
    """Background of 250 dipoles, posterior alpha, a tag, blinks, gaze, muscle, sensor noise."""
    names, positions_m, lead_field, dipoles_m = head()
    rng = np.random.default_rng(seed)
    n_times = int(duration_s * SAMPLING_HZ)
    times_s = np.arange(n_times) / SAMPLING_HZ
    at = names.index
    brain = len(dipoles_m) - 2
    radial = dipoles_m / np.linalg.norm(dipoles_m, axis=1, keepdims=True)

    chosen = rng.choice(brain, 250, replace=False)
    directions = rng.standard_normal((250, 3))
    directions /= np.linalg.norm(directions, axis=1, keepdims=True)
    topographies = np.einsum("cdk,dk->cd", lead_field[:, chosen], directions)
    background = topographies @ pink(rng, 250, n_times)
    background *= rng.uniform(6, 12) / np.median(background.std(axis=1))

    posterior = np.argsort(dipoles_m[:brain, 1])[:25]
    frequencies_hz = np.fft.rfftfreq(n_times, 1 / SAMPLING_HZ)
    shape = (25, frequencies_hz.size)
    spectrum = rng.standard_normal(shape) + 1j * rng.standard_normal(shape)
    spectrum[1:] = 0.4 * spectrum[1:] + spectrum[0]
    spectrum *= np.exp(-0.5 * ((frequencies_hz - rng.uniform(9, 11)) / 0.7) ** 2)
    topographies = np.einsum("cdk,dk->cd", lead_field[:, posterior], radial[posterior])
    alpha = topographies @ np.fft.irfft(spectrum, n_times)
    alpha *= (rng.uniform(3, 20) if alpha_uv is None else alpha_uv) / alpha[at("Oz")].std()

    evoked = topographies[:, :8].sum(axis=1)
    evoked /= abs(evoked[at("Oz")])
    tag = np.outer(evoked, rng.uniform(0.5, 3) * np.cos(2 * np.pi * tag_hz * times_s + 1))
    tag += np.outer(evoked, rng.uniform(0.2, 1) * np.cos(4 * np.pi * tag_hz * times_s))

    blink = (lead_field[:, -2:] @ [0, 1, 0.6]).sum(axis=1)
    gaze = (lead_field[:, -2:] @ [1, 0, 0]).sum(axis=1)
    blinks, gazes = np.zeros(n_times), np.zeros(n_times)
    onsets_s = np.cumsum(0.5 + rng.exponential(4, int(duration_s)))
    for onset_s in onsets_s[onsets_s < duration_s]:
        blinks += rng.uniform(80, 200) * np.exp(-0.5 * ((times_s - onset_s) / 0.08) ** 2)
    onsets_s = np.cumsum(rng.exponential(2, 2 * int(duration_s)))
    for onset_s in onsets_s[onsets_s < duration_s]:
        gazes[int(onset_s * SAMPLING_HZ) :] = rng.uniform(-40, 40)
    gazes = np.convolve(gazes, np.ones(8) / 8, mode="same")
    eyes = np.outer(blink / blink[at("Fp1")], blinks) + np.outer(gaze / np.abs(gaze).max(), gazes)

    muscle = np.zeros_like(background)
    for side in ("T7", "T8"):
        distance_m = np.linalg.norm(positions_m - positions_m[at(side)], axis=1)
        burst = np.zeros(n_times)
        for start in rng.integers(0, n_times, rng.integers(0, 4)):
            burst[start : start + int(rng.uniform(0.5, 2) * SAMPLING_HZ)] = rng.uniform(3, 15)
        burst *= np.diff(rng.standard_normal(n_times + 1))
        muscle += np.outer(np.exp(-((distance_m / 0.035) ** 2)), burst)

    sensor = rng.uniform(0.3, 1, (len(names), 1)) * rng.standard_normal(background.shape)
    parts = {"background": background, "alpha": alpha, "tag": tag, "eyes": eyes, "muscle": muscle}
    everything = sum(parts.values()) + sensor
    mastoids = [at("P9"), at("P10")]
    reference = everything[mastoids].mean(axis=0) if rng.random() < 0.5 else everything.mean(axis=0)
    drift = rng.uniform(-2000, 2000, (len(names), 1))
    drift = drift + 50 * rng.standard_normal((len(names), 1)) * times_s / duration_s
    kept = [at(name) for name in CAPS.get(n_channels, names)]
    parts["reference"] = np.broadcast_to(reference, everything.shape)
    return Simulated(
        names=[names[index] for index in kept],
        positions_m=positions_m[kept],
        recorded_uv=(everything - reference + drift)[kept],
        parts_uv={name: part[kept] for name, part in parts.items()},
    )


def plant(simulated, channel, fault, rng):
    """Put one fault, of a size that a person would see, into a channel."""
    row = simulated.recorded_uv[channel]
    n_times = row.size
    centre = np.median(row)
    if fault == "flat":
        row[:] = centre + rng.uniform(0, 0.2) * rng.standard_normal(n_times)
    elif fault == "saturated":
        rail_uv = np.percentile(np.abs(row - centre), rng.uniform(60, 97))
        row.clip(centre - rail_uv, centre + rail_uv, out=row)
    elif fault == "drop-outs":
        for start in rng.integers(0, n_times - int(2 * SAMPLING_HZ), rng.integers(4, 12)):
            value = row[start] if rng.random() < 0.5 else 0.0
            row[start : start + int(rng.uniform(0.3, 1.5) * SAMPLING_HZ)] = value
    elif fault == "jumps":
        for start in rng.choice(n_times, rng.integers(6, 20), replace=False):
            row[start:] += rng.choice([-1, 1]) * rng.uniform(150, 800)
    elif fault == "large":
        row[:] = centre + (row - centre) * rng.uniform(6, 15)
    elif fault == "noise":
        row += rng.uniform(15, 50) * rng.standard_normal(n_times)
    elif fault == "loose":  # the amplifier records noise of its own against the reference
        size_uv = np.median(simulated.parts_uv["background"].std(axis=1))
        noise_uv = rng.uniform(0.7, 2.5) * size_uv * pink(rng, 1, n_times)[0]
        row[:] = centre + noise_uv - simulated.parts_uv["reference"][channel]


def with_faults(n_channels, seed, duration_s=60):
    simulated = simulate(n_channels, seed, duration_s)
    rng = np.random.default_rng([seed, 1])
    # One of three channels cannot be compared with others, so a loose one cannot be told there.
    faults = FAULTS if n_channels > 3 else FAULTS[:-1]
    n_faults = rng.integers(1, 4) if n_channels > 3 else 1
    truth = {}
    for channel in rng.choice(n_channels, n_faults, replace=False):
        fault = str(rng.choice(faults))
        plant(simulated, channel, fault, rng)
        truth[simulated.names[channel]] = fault
    return simulated, truth


def bad_channels(verdicts):
    return {verdict.channel for verdict in verdicts if verdict.verdict == "bad"}


def count_over(seeds, caps, duration_s):
    """Recall, precision and share of false verdicts on clean recordings."""
    found = planted = right = clean = false = 0
    for seed in seeds:
        n_channels = caps[seed % len(caps)]
        simulated, truth = with_faults(n_channels, seed, duration_s)
        bad = bad_channels(simulated.judge())
        found, planted, right = (
            found + len(bad),
            planted + len(truth),
            right + len(bad & set(truth)),
        )
        clean += n_channels
        false += len(bad_channels(simulate(n_channels, 10_000 + seed, duration_s).judge()))
    return right / planted, right / found, false / clean


# ------------------------------------------------------------------------------------- verdicts


def test_recall_precision_and_false_verdicts():
    recall, precision, false = count_over(range(100, 120), (3, 16, 24, 16, 24), duration_s=30)
    assert recall >= 0.95
    assert precision >= 0.9
    assert false <= 0.01


@pytest.mark.long
def test_recall_precision_and_false_verdicts_over_200_recordings():
    recall, precision, false = count_over(range(1000, 1200), (3, 16, 24, 64), duration_s=60)
    print(f"recall {recall:.4f}, precision {precision:.4f}, false verdicts {false:.5f}")
    assert recall >= 0.95
    assert precision >= 0.9
    assert false <= 0.01


@pytest.mark.parametrize(
    ("fault", "reason"),
    [
        ("flat", "flat"),
        ("saturated", "saturated"),
        ("jumps", "jumps"),
        ("large", "deviating amplitude"),
        ("noise", "high-frequency noise"),
        ("loose", "unpredicted"),
    ],
)
def test_each_fault_has_its_reason(fault, reason):
    simulated = simulate(24, 3)
    plant(simulated, simulated.names.index("C3"), fault, np.random.default_rng(0))
    verdicts = {verdict.channel: verdict for verdict in simulated.judge()}
    assert bad_channels(verdicts.values()) == {"C3"}
    assert reason in verdicts["C3"].reasons


def test_drop_outs():
    simulated = simulate(24, 3)
    row = simulated.recorded_uv[5]
    for start in range(500, 10_000, 1000):
        row[start : start + 60] = row[start]
    (verdict,) = [verdict for verdict in simulated.judge() if verdict.verdict == "bad"]
    assert "drop-outs" in verdict.reasons
    assert verdict.figures["dropout_share"] == pytest.approx(10 * 60 / 12_000, rel=0.05)


def test_a_gap_in_all_channels_is_no_channels_fault():
    simulated = simulate(24, 4)
    simulated.recorded_uv[:, 4000:5000] = simulated.recorded_uv[:, 4000:4001]
    assert bad_channels(simulated.judge()) == set()


def test_strong_alpha_and_frequent_blinks_are_not_faults():
    for seed in range(3):
        assert bad_channels(simulate(24, seed, alpha_uv=40).judge()) == set()
    simulated = simulate(24, 5)
    simulated.recorded_uv += 2 * simulated.parts_uv["eyes"]
    assert bad_channels(simulated.judge()) == set()


def test_figures_stand_with_their_limits_and_serialise():
    verdict = simulate(16, 1).judge(SensorLimits(flat_uv=0.7))[0]
    assert verdict.figures.keys() == verdict.limits.keys()
    assert verdict.limits["flat_uv"] == 0.7
    assert json.loads(json.dumps(dataclasses.asdict(verdict)))["verdict"] == "good"


def test_few_channels_have_no_comparison_and_wider_ratios():
    verdict = simulate(3, 1).judge()[0]
    assert verdict.figures["uncorrelated_share"] is None
    assert verdict.figures["unpredicted_share"] is None
    assert verdict.figures["deviation_z"] is None
    assert verdict.limits["deviation_ratio"] == 1.5 * SensorLimits().deviation_ratio


def test_channels_without_positions_are_judged_without_prediction():
    simulated = simulate(24, 6)
    simulated.positions_m[[2, 7]] = np.nan
    verdicts = simulated.judge()
    assert bad_channels(verdicts) == set()
    assert verdicts[2].figures["unpredicted_share"] is None
    assert verdicts[2].figures["deviation_z"] is not None
    assert verdicts[3].figures["unpredicted_share"] is not None


def test_same_seed_same_verdicts_in_single_precision_too():
    simulated, _ = with_faults(24, 7)
    verdicts = simulated.judge()
    assert simulated.judge() == verdicts
    simulated.recorded_uv = simulated.recorded_uv.astype(np.float32)
    single = simulated.judge()
    assert [v.reasons for v in single] == [v.reasons for v in verdicts]


# ------------------------------------------------------------------- interpolation and reference


def test_spline_weights_equal_those_of_mne():
    simulated = simulate(24, 8)
    raw = simulated.raw(simulated.filtered_uv())
    bad = ["F3", "Oz"]
    by_mne = raw.copy()
    by_mne.info["bads"] = bad
    by_mne.interpolate_bads(origin=(0, 0, 0), verbose="error")
    good = [index for index, name in enumerate(simulated.names) if name not in bad]
    weights = spline_weights(
        simulated.positions_m[good], simulated.positions_m[[simulated.names.index(b) for b in bad]]
    )
    # Both cut the series after 50 terms; 1e-6 is what single-precision positions leave.
    np.testing.assert_allclose(
        weights @ raw.get_data()[good], by_mne.get_data(picks=bad), rtol=1e-5, atol=1e-10
    )


def test_sphere_centre():
    _, positions_m, _, _ = head()
    np.testing.assert_allclose(
        sphere_centre(positions_m + [0, 0.01, 0.05]), [0, 0.01, 0.05], atol=1e-4
    )
    np.testing.assert_array_equal(sphere_centre(positions_m[:5]), [0, 0, 0.04])
    np.testing.assert_array_equal(sphere_centre(10 * positions_m), [0, 0, 0.04])


def test_interpolate_and_average_reference():
    simulated = simulate(64, 9)
    data_uv = simulated.filtered_uv()
    raw = simulated.raw(data_uv)
    truth = raw.get_data(picks="Pz")[0]
    raw._data[raw.ch_names.index("Pz")] = 1e-3
    done = interpolate_and_reference(raw, ["Pz"], None)
    assert done.interpolated == ("Pz",)
    assert done.left_out == {}
    assert np.corrcoef(done.raw.get_data(picks="Pz")[0], truth)[0, 1] > 0.97
    done = interpolate_and_reference(raw, ["Pz"], "average")
    np.testing.assert_allclose(done.raw.get_data().mean(axis=0), 0, atol=1e-18)  # V
    singular = np.linalg.svd(done.raw.get_data(), compute_uv=False)
    assert done.rank == np.sum(singular > 1e-6 * singular[0]) == 62


def test_named_reference():
    simulated = simulate(64, 10)
    raw = simulated.raw(simulated.filtered_uv())
    done = interpolate_and_reference(raw, ["Cz"], ["P9", "P10"])
    np.testing.assert_allclose(done.raw.get_data(picks=["P9", "P10"]).sum(axis=0), 0, atol=1e-18)
    assert done.rank == 62
    with pytest.raises(DataError, match="reference Cz is not among the good channels"):
        interpolate_and_reference(raw, ["Cz"], ["Cz"])
    with pytest.raises(DataError, match="reference M1 is not among"):
        interpolate_and_reference(raw, [], ["M1", "P9"])


def test_the_average_of_one_channel_is_no_reference():
    simulated = simulate(3, 10)
    simulated.positions_m[:2] = np.nan
    raw = simulated.raw(simulated.filtered_uv())
    before = raw.get_data()
    with pytest.raises(DataError, match="average of one channel, O2 alone, nothing is left"):
        interpolate_and_reference(raw, ["O1", "Oz"], "average")
    np.testing.assert_array_equal(raw.get_data(), before)
    assert interpolate_and_reference(raw, ["O1", "Oz"], None).rank == 1


def test_other_channels_are_left_as_they_are():
    simulated = simulate(24, 11)
    raw = simulated.raw(simulated.filtered_uv())
    raw.set_channel_types({"Fp1": "eog"}, verbose="error")
    raw.info["bads"] = ["Oz"]
    done = interpolate_and_reference(raw.copy(), [], "average")
    np.testing.assert_array_equal(done.raw.get_data(picks="Fp1"), raw.get_data(picks="Fp1"))
    np.testing.assert_allclose(done.raw.get_data(picks="eeg").mean(axis=0), 0, atol=1e-18)
    assert done.rank == 22


def test_bad_without_a_position_is_left_out_with_a_reason():
    simulated = simulate(24, 12)
    simulated.positions_m[4] = np.nan
    raw = simulated.raw(simulated.filtered_uv())
    done = interpolate_and_reference(raw, ["F3", "Oz"], "average")
    assert done.left_out == {"F3": "bad, and without a position"}
    assert "F3" not in done.raw.ch_names
    assert done.interpolated == ("Oz",)
    assert done.rank == 24 - 2 - 1


@pytest.mark.parametrize("n_bad", [22, 24])
def test_too_few_good_channels(n_bad):
    simulated = simulate(24, 13)
    raw = simulated.raw(simulated.filtered_uv())
    with pytest.raises(
        DataError, match=rf"{n_bad} of 24 channels are bad .* at least 3 are needed"
    ):
        interpolate_and_reference(raw, raw.ch_names[:n_bad], "average")
