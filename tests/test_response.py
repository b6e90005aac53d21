"""Response measures against published tables, worked examples and simulations with fixed seeds."""

import numpy as np
import pytest
from onbin import circular, response
from onbin.distributions import f_survival
from scipy import stats

# Worked example of eight complex estimates; its T²circ was recomputed by ordinary least squares on
# the stacked parts and by coherence, its T² by two libraries' multivariate tests.
EXAMPLE = np.array(
    [1.2 + 0.5j, 0.8 - 0.3j, 1.5 + 0.9j, 0.4 + 0.2j, 1.1 - 0.6j, 0.9 + 1.1j, 1.7 + 0.1j, 0.6 + 0.7j]
)
SECOND = 0.6 * EXAMPLE * np.exp(0.4j) + [0.1, -0.2, 0.3j, -0.1j, 0.2, -0.3, 0.1j, 0.05]


def noise(rng, *shape):
    return rng.normal(size=shape) + 1j * rng.normal(size=shape)


def within_binomial(hits, n, p):
    """Whether a rate lies in its binomial 99 % interval."""
    return stats.binomtest(int(hits), n, p).pvalue > 0.01


def test_t2circ_of_the_worked_example():
    statistic, p = circular.t2circ(EXAMPLE)
    assert statistic == pytest.approx(2.1468832891, rel=1e-9)
    assert len(EXAMPLE) * statistic == pytest.approx(17.1750663130, rel=1e-9)
    assert p == pytest.approx(0.00017065246, rel=1e-6)


def test_t2circ_equals_coherence():
    # MSC = |Σz|²/(K·Σ|z|²), p = (1 − MSC)^(K−1) (Dobie & Wilson 1996)
    msc = abs(EXAMPLE.sum()) ** 2 / (8 * (abs(EXAMPLE) ** 2).sum())
    assert msc == pytest.approx(0.7104454685, rel=1e-9)
    assert circular.t2circ(EXAMPLE)[1] == pytest.approx((1 - msc) ** 7, rel=1e-9)


def test_t2circ_between_two_sets():
    f, p = circular.t2circ_two(EXAMPLE, SECOND)
    assert f == pytest.approx(3.0508397594, rel=1e-9)
    assert p == pytest.approx(0.0632924166, rel=1e-8)


@pytest.mark.parametrize(
    ("windows", "critical"),
    [(4, (1.28581, 2.73119, 6.75)), (8, (0.46736, 0.81436, 1.47236)),
     (10, (0.35546, 0.60129, 1.03899)), (20, (0.16224, 0.26056, 0.41653)),
     (50, (0.06178, 0.09657, 0.14837))],
)  # fmt: skip
def test_critical_values_of_t2circ(windows, critical):
    # from the F distribution of Victor & Mast 1991
    for value, level in zip(critical, (0.05, 0.01, 0.001), strict=True):
        p = f_survival(windows * value, 2, 2 * windows - 2)
        assert p == pytest.approx(level, rel=2e-4)  # the table has five decimals


def test_hotelling_of_the_worked_example():
    statistic, p = response.hotelling(EXAMPLE)
    assert statistic == pytest.approx(45.3849493930, rel=1e-9)
    assert p == pytest.approx(0.0023860225, rel=1e-7)


def test_condition_index_of_the_worked_example():
    index, p = response.condition_index(EXAMPLE)
    assert index == pytest.approx(1.336491, rel=1e-6)
    assert p == pytest.approx(0.779, abs=1e-3)


@pytest.mark.parametrize(
    ("windows", "critical"),
    [(4, 8.797), (6, 3.978), (8, 2.957), (10, 2.510), (15, 2.024), (20, 1.810), (50, 1.429)],
)
def test_critical_condition_index(windows, critical):
    # Baker 2021, arXiv 2101.04408: upper 5 % points of the index under circularity
    tail = (2 * critical / (critical**2 + 1)) ** (windows - 2)
    assert tail == pytest.approx(0.05, rel=1e-2)  # the table was integrated on a finite range


@pytest.mark.parametrize(
    ("bins", "critical"),
    [(1, (19.0, 99.0, 999.0)), (2, (6.9443, 18.0, 61.2456)), (4, (4.4590, 8.6491, 18.4937)),
     (10, (3.4928, 5.8489, 9.9526)), (20, (3.2317, 5.1785, 8.2508)),
     (30, (3.1504, 4.9774, 7.7678))],
)  # fmt: skip
def test_snr_thresholds(bins, critical):
    # power ratio to the mean of n neighbouring bins ~ F(2, 2n): closed form p = (1 + F/n)^(−n)
    for value, level in zip(critical, (0.05, 0.01, 0.001), strict=True):
        assert response.snr_p(value, bins) == pytest.approx(level, rel=1e-4)
        assert response.snr_p(value, bins) == pytest.approx((1 + value / bins) ** -bins, rel=1e-9)


def test_thresholds_of_meigen_and_bach():
    # Meigen & Bach 2000: amplitude ratio 4.36, 9.95, 31.6 at .05, .01, .001 with one noise line
    for ratio, level in ((4.36, 0.05), (9.95, 0.01), (31.6, 0.001)):
        assert response.snr_p(ratio**2, 1) == pytest.approx(level, rel=2e-3)  # three digits given


def test_amplitude_ratio_to_two_lines_follows_meigen_and_bach():
    # mean amplitude of one lower and one upper line: 2.82, 4.55, 8.40 at .05, .01, .001
    rng = np.random.default_rng(4)
    signal, lines = noise(rng, 1, 400_000), noise(rng, 1, 400_000, 2)
    ratio = abs(signal[0]) / response.neighbour_noise(lines).mean_amplitude_uv
    for threshold, level in ((2.82, 0.05), (4.55, 0.01), (8.40, 0.001)):
        assert np.mean(ratio > threshold) == pytest.approx(level, rel=0.1)  # 5 sd at .001


def test_snr_of_noise_has_the_mean_that_the_dictionary_states():
    rng = np.random.default_rng(5)
    X, beside = noise(rng, 6, 40_000), noise(rng, 6, 40_000, 20)
    found = response.neighbour_noise(beside)
    snr = abs(X.mean(axis=0)) ** 2 / found.evoked_uv2
    assert snr.mean() == pytest.approx(20 / 19, rel=0.03)  # sd of the mean 0.6 %
    baseline = abs(X.mean(axis=0)) - found.mean_amplitude_uv
    assert baseline.mean() == pytest.approx(0, abs=5 * baseline.std() / 200)


def test_phase_locking_of_the_worked_example():
    found = response.phase_locking(EXAMPLE)
    assert found.itpc == pytest.approx(0.8865172487, rel=1e-9)
    assert found.rayleigh_z == pytest.approx(6.2873026580, rel=1e-9)
    assert found.rayleigh_p == pytest.approx(0.00048590490, rel=1e-7)
    assert found.ppc == pytest.approx(0.7553289511, rel=1e-9)


def test_rayleigh_of_zar():
    # Zar 2010, examples 26.4 and 27.1: r 0.82522, z 5.448, .001 < p < .002
    angles = np.deg2rad([45, 55, 81, 96, 110, 117, 132, 154])
    found = response.phase_locking(np.exp(1j * angles))
    assert found.itpc == pytest.approx(0.82522, abs=5e-6)
    assert found.rayleigh_z == pytest.approx(5.448, abs=5e-4)
    assert found.rayleigh_p == pytest.approx(0.0018516, abs=5e-8)
    assert np.rad2deg(np.angle(np.exp(1j * angles).mean())) == pytest.approx(98.98775, abs=1e-5)


def test_mean_direction_of_jammalamadaka_and_sengupta():
    # Jammalamadaka & SenGupta 2001, p. 23: mean 48.63°, circular variance 0.1635635
    angles = np.deg2rad([51, 67, 40, 109, 31, 358])
    assert response.phase_locking(np.exp(1j * angles)).itpc == pytest.approx(
        1 - 0.1635635, abs=5e-8
    )
    phase, _ = response.phase_interval(np.exp(1j * angles))
    assert np.rad2deg(phase) == pytest.approx(48.62718, abs=1e-5)


@pytest.mark.parametrize(
    ("windows", "itpc_05", "itpc_01"),
    [(6, 0.690, 0.825), (8, 0.602, 0.725), (10, 0.540, 0.655), (15, 0.443, 0.542),
     (20, 0.385, 0.472)],
)  # fmt: skip
def test_rayleigh_critical_values_of_mardia(windows, itpc_05, itpc_01):
    # Mardia 1972, table of critical mean resultant lengths; Zar's p is good to 0.002 in z at 5 %
    for length, level in ((itpc_05, 0.05), (itpc_01, 0.01)):
        z = windows * length**2
        p = np.exp(np.sqrt(1 + 4 * windows + 4 * windows * (windows - z)) - (1 + 2 * windows))
        assert p == pytest.approx(level, rel=0.05)  # three digits of the length


@pytest.mark.parametrize(("windows", "mean"), [(5, 0.4020), (10, 0.2823), (50, 0.1254)])
def test_bias_of_phase_coherence(windows, mean):
    # E[ITPC²] = 1/n exactly, E[ITPC] ≈ sqrt(π/(4n)), PPC is unbiased
    found = response.phase_locking(noise(np.random.default_rng(6), windows, 40_000))
    assert found.itpc.mean() == pytest.approx(mean, rel=0.01)
    assert (found.itpc**2).mean() == pytest.approx(1 / windows, rel=0.03)
    assert found.ppc.mean() == pytest.approx(0, abs=5 * found.ppc.std() / 200)


@pytest.mark.parametrize("amplitude_uv", [0.1, 0.5, 1.0, 5.0])
def test_amplitude_intervals_cover(amplitude_uv):
    X = amplitude_uv * np.exp(0.3j) + noise(np.random.default_rng(7), 12, 10_000)
    low, high = response.amplitude_interval(X)
    covered = (low <= amplitude_uv) & (amplitude_uv <= high)
    assert covered.mean() == pytest.approx(0.95, abs=0.01)  # 4.6 binomial sd
    radius = response.disc_radius(X)
    inside = abs(X.mean(axis=0) - amplitude_uv * np.exp(0.3j)) <= radius
    assert inside.mean() == pytest.approx(0.95, abs=0.01)


def test_amplitude_interval_begins_at_zero_without_a_response():
    low, _ = response.amplitude_interval(noise(np.random.default_rng(8), 12, 10_000))
    assert np.mean(low == 0) > 0.97


def test_phase_intervals_cover():
    X = np.exp(1j) + 0.8 * noise(np.random.default_rng(9), 12, 10_000)
    phase, half = response.phase_interval(X)
    assert np.mean(abs(np.angle(np.exp(1j * (phase - 1)))) <= half) >= 0.95  # disc: conservative


def test_projected_amplitude_is_unbiased():
    rng = np.random.default_rng(10)
    nothing = response.projected_amplitude(noise(rng, 20, 5_000))
    assert nothing.mean() == pytest.approx(0, abs=5 / np.sqrt(100_000))
    something = response.projected_amplitude(3 * np.exp(0.7j) + noise(rng, 20, 5_000))
    assert something.mean() == pytest.approx(3, rel=5e-3)


def test_measures_of_flicker_without_fixed_phase_rest_on_power():
    rng = np.random.default_rng(11)
    X = 2 * np.exp(2j * np.pi * rng.random((30, 1))) + noise(rng, 30, 1)
    found = response.measures(X, noise(rng, 30, 1, 20), phase_locked=False)
    assert "amplitude_uv" not in found
    assert "t2circ" not in found
    assert found["detection_test"] == "total_snr"
    assert found["detection_p"][0] < 1e-6


def test_without_neighbours_the_noise_is_not_known():
    X = np.exp(0.3j) + noise(np.random.default_rng(12), 10, 2)
    found = response.measures(X, np.empty((10, 2, 0)), phase_locked=True)
    assert np.isnan(found["snr"]).all()
    assert np.isnan(found["snr_p"]).all()
    assert np.isfinite(found["t2circ_p"]).all()


@pytest.mark.parametrize("level", [0.05, 0.01])
def test_false_positives_without_a_response(level):
    # 10 000 simulations of 20 windows, 20 neighbours: rates within their binomial 99 % intervals
    rng = np.random.default_rng(13)
    found = response.measures(noise(rng, 20, 10_000), noise(rng, 20, 10_000, 20), True)
    for test in ("snr_p", "t2circ_p", "hotelling_p", "rayleigh_p", "condition_index_p"):
        assert within_binomial((found[test] < level).sum(), 10_000, level), test


def test_total_snr_keeps_its_level():
    rng = np.random.default_rng(14)
    found = response.measures(noise(rng, 20, 10_000), noise(rng, 20, 10_000, 20), False)
    assert within_binomial((found["snr_p"] < 0.05).sum(), 10_000, 0.05)


@pytest.mark.parametrize("amplitude_uv", [0.3, 0.5, 0.8])
def test_power_of_t2circ_follows_the_noncentral_f(amplitude_uv):
    # K·T²circ ~ F(2, 2K−2) with noncentrality K·A²/σ², σ² the variance of each part
    K = 16
    X = amplitude_uv + noise(np.random.default_rng(15), K, 20_000)
    power = np.mean(circular.t2circ(X)[1] < 0.05)
    threshold = stats.f.isf(0.05, 2, 2 * K - 2)
    expected = stats.ncf.sf(threshold, 2, 2 * K - 2, K * amplitude_uv**2)
    assert power == pytest.approx(expected, abs=0.02)


def test_apparent_latency_is_the_slope_of_phase():
    # a delay of 41 ms on four harmonics of 15 Hz, whose cycle is 66.7 ms
    frequencies_hz = np.array([15.0, 30.0, 45.0, 60.0])
    phase = np.angle(np.exp(1j * (0.6 - 2 * np.pi * frequencies_hz * 0.041)))[:, None]
    half = np.full((4, 1), 0.1)
    latency_s, half_s = response.apparent_latency(phase, half, frequencies_hz)
    assert latency_s[0] == pytest.approx(0.041, rel=1e-9)
    # least squares: 0.1 rad over sqrt(Σ(f − mean)²) Hz and 2π
    assert half_s[0] == pytest.approx(0.1 / np.sqrt(1125) / (2 * np.pi), rel=1e-9)


def test_apparent_latency_needs_two_phases():
    phase, half = np.zeros((3, 1)), np.array([[0.1], [np.pi], [np.pi]])
    latency_s, half_s = response.apparent_latency(phase, half, np.array([10.0, 20.0, 30.0]))
    assert np.isnan(latency_s[0])
    assert np.isnan(half_s[0])


def test_intervals_of_apparent_latency_cover():
    rng = np.random.default_rng(16)
    frequencies_hz = np.array([12.0, 24.0, 36.0])
    true = 2 * np.exp(1j * (0.3 - 2 * np.pi * frequencies_hz * 0.05))
    measured = [response.phase_interval(z + noise(rng, 20, 4_000)) for z in true]
    phase, half = (np.stack(values) for values in zip(*measured, strict=True))
    latency_s, half_s = response.apparent_latency(phase, half, frequencies_hz)
    assert np.mean(abs(latency_s - 0.05) <= half_s) >= 0.95  # phases' discs are conservative
