"""Individual alpha frequency, aperiodic fit and band power against spectra of known make-up."""

import numpy as np
import pytest
from onbin.alpha import (
    AperiodicFit,
    band_power,
    centre_of_gravity,
    fit_aperiodic,
    individual_alpha_frequency,
    lateralisation,
    periodic_power,
    relative_power,
)
from onbin.errors import DataError

GRID_HZ = np.arange(1, 40.01, 0.25)
RATE_HZ = 250


def spectrum(offset, exponent, *peaks, frequencies_hz=GRID_HZ):
    """Power law with Gaussian peaks (centre, height in log10, SD) on log power."""
    log_power = offset - exponent * np.log10(frequencies_hz)
    for centre, height, sd in peaks:
        log_power = log_power + height * np.exp(-((frequencies_hz - centre) ** 2) / (2 * sd**2))
    return 10**log_power


def highest_hz(*make_up):
    """Frequency of the greatest power between 7 and 13 Hz, on a grid of 1 mHz."""
    fine = np.arange(7, 13, 0.001)
    return fine[np.argmax(spectrum(*make_up, frequencies_hz=fine))]


def recording_psd(rng, n_channels, duration_s, exponent, *peaks):
    """Welch spectrum (2 s Hann, zero-padded to 0.25 Hz) of coloured Gaussian noise."""
    from scipy.signal import welch

    n = duration_s * RATE_HZ
    frequencies_hz = np.maximum(np.fft.rfftfreq(n, 1 / RATE_HZ), 0.5)
    amplitude = np.sqrt(spectrum(1, exponent, *peaks, frequencies_hz=frequencies_hz))
    shape = (n_channels, frequencies_hz.size)
    coefficients = amplitude * (rng.normal(size=shape) + 1j * rng.normal(size=shape))
    signal = np.fft.irfft(coefficients, n) * np.sqrt(n)
    return welch(signal, RATE_HZ, "hann", 2 * RATE_HZ, RATE_HZ, nfft=4 * RATE_HZ)


# Aperiodic fit


@pytest.mark.parametrize(
    "make_up",
    [
        (0, 1.0, (10, 0.5, 1)),
        (1, 1.5, (10, 0.8, 1.5), (20, 0.3, 2)),
        (-2, 2.0, (9.6, 1, 0.9)),
    ],
)
def test_aperiodic_fit_recovers_the_make_up_of_a_spectrum(make_up):
    # Model of Donoghue et al. 2020. Overlapping peaks cost the model up to 0.02.
    fit = fit_aperiodic(GRID_HZ, spectrum(*make_up))
    np.testing.assert_allclose([fit.offset, fit.exponent], make_up[:2], atol=0.02)
    assert fit.r_squared > 0.999


def test_aperiodic_fit_of_averaged_periodograms():
    # An average of 30 periodograms is gamma distributed; 0.1 is nearly three SD of the exponent.
    rng = np.random.default_rng(1)
    power = spectrum(0, 1.3, (10.3, 0.6, 1.2)) * rng.gamma(30, 1 / 30, (20, GRID_HZ.size))
    exponents = [fit_aperiodic(GRID_HZ, channel).exponent for channel in power]
    np.testing.assert_allclose(np.mean(exponents), 1.3, atol=0.04)
    np.testing.assert_allclose(exponents, 1.3, atol=0.15)


def test_aperiodic_fit_ignores_excluded_frequencies():
    clean = spectrum(1, 1.2, (10, 0.6, 1))
    tagged = clean.copy()
    for tag_hz in (15, 30, 40):
        tagged[np.abs(GRID_HZ - tag_hz) <= 1] *= 100
    fit = fit_aperiodic(GRID_HZ, tagged, exclude_hz=(15, 30, 40, 50))
    reference = fit_aperiodic(GRID_HZ, clean)
    # What is bridged is straight in log-log, so the clean fit comes back but for rounding of peaks.
    np.testing.assert_allclose(fit.exponent, reference.exponent, atol=0.005)
    np.testing.assert_allclose(fit.offset, reference.offset, atol=0.005)
    assert abs(fit_aperiodic(GRID_HZ, tagged).exponent - 1.2) > 0.02


def test_aperiodic_density():
    fit = AperiodicFit(offset=1.0, exponent=2.0, r_squared=1.0)
    np.testing.assert_allclose(fit.psd_uv2_per_hz([1, 10]), [10, 0.1], rtol=1e-12)


def test_aperiodic_fit_refuses_what_it_cannot_use():
    power = spectrum(0, 1)
    with pytest.raises(DataError, match="half of them are needed"):
        fit_aperiodic(GRID_HZ, power, exclude_hz=np.arange(2, 40, 3))
    with pytest.raises(DataError, match="even steps"):
        fit_aperiodic(GRID_HZ**1.1, power)
    with pytest.raises(DataError, match="positive and finite"):
        fit_aperiodic(GRID_HZ, np.where(GRID_HZ == 10, 0, power))


# Centre of gravity


@pytest.mark.parametrize(
    ("power", "expected_hz"),
    [([1, 2, 4, 7, 9, 7, 4, 2, 1], 10.0), ([2, 3, 6, 10, 8, 5, 3, 2, 1], 9.775)],
)
def test_centre_of_gravity_by_hand(power, expected_hz):
    # Σ f·P / Σ P (Klimesch 1999, from memory), worked by hand: 391 / 40 = 9.775.
    frequencies_hz = np.arange(8, 12.5, 0.5)
    found = centre_of_gravity(frequencies_hz, np.array(power), 8, 12)
    np.testing.assert_allclose(found, expected_hz, rtol=1e-12)


def test_background_pulls_the_centre_of_gravity_of_the_whole_power_down():
    # Worked by hand: a Gaussian of SD 1 Hz at 10 Hz alone, and over 3/f.
    gaussian = np.exp(-((GRID_HZ - 10) ** 2) / 2)
    np.testing.assert_allclose(centre_of_gravity(GRID_HZ, gaussian, 7, 13), 10, rtol=1e-12)
    with_background = centre_of_gravity(GRID_HZ, gaussian + 3 / GRID_HZ, 7, 13)
    np.testing.assert_allclose(with_background, 9.854208, atol=1e-6)

    found = individual_alpha_frequency(GRID_HZ, np.tile(gaussian + 3 / GRID_HZ, (3, 1)))
    # Within a twelfth of a bin, where the whole power is off by more than half of one.
    np.testing.assert_allclose(found.centre_of_gravity_hz, 10, atol=0.02)


# Individual alpha frequency


@pytest.mark.parametrize("centre_hz", [8.0, 9.57, 9.7, 10.0, 10.06, 10.12, 11.4, 12.0])
@pytest.mark.parametrize("exponent", [0.5, 1.0, 1.5])
def test_peak_is_found_between_bins(centre_hz, exponent):
    make_up = (1, exponent, (centre_hz, 0.8, 1.0))
    found = individual_alpha_frequency(GRID_HZ, np.tile(spectrum(*make_up), (3, 1)))
    # The smoothing polynomial and the parabola leave a tenth of the 0.25 Hz bin.
    np.testing.assert_allclose(found.peak_hz, highest_hz(*make_up), atol=0.025)
    assert found.low_hz < centre_hz < found.high_hz
    assert (found.n_channels_peak, found.n_channels_centre, found.reason) == (3, 3, "")


def test_alpha_frequency_of_recordings():
    rng = np.random.default_rng(3)
    found = [
        individual_alpha_frequency(*recording_psd(rng, 4, 120, 1.0, (10.1, 0.7, 1.0)))
        for _ in range(10)
    ]
    # SD over recordings is about 0.08 Hz for the peak and 0.05 Hz for the centre of gravity.
    np.testing.assert_allclose([f.peak_hz for f in found], 10.1, atol=0.35)
    np.testing.assert_allclose([f.centre_of_gravity_hz for f in found], 10.1, atol=0.2)


@pytest.mark.parametrize("exponent", [0.5, 1.0, 1.5, 2.0])
def test_no_alpha_is_found_in_noise(exponent):
    rng = np.random.default_rng(4)
    found = [individual_alpha_frequency(*recording_psd(rng, 4, 60, exponent)) for _ in range(15)]
    # Measured over 60 recordings each: none with an exponent of 1 or more, 2 % with 0.5.
    assert sum(np.isfinite(f.peak_hz) for f in found) <= 1
    nothing = next(f for f in found if np.isnan(f.centre_of_gravity_hz))
    assert np.isnan([nothing.peak_hz, nothing.low_hz, nothing.high_hz]).all()
    assert "channels have a peak above the background" in nothing.reason


def test_alpha_frequency_needs_three_channels_or_all_of_fewer():
    # At least 3 channels: Corcoran et al. 2018.
    alpha, none = spectrum(1, 1, (10, 0.8, 1)), spectrum(1, 1)
    assert np.isfinite(individual_alpha_frequency(GRID_HZ, np.stack([alpha] * 3 + [none])).peak_hz)
    two_of_four = individual_alpha_frequency(GRID_HZ, np.stack([alpha] * 2 + [none] * 2))
    assert np.isnan(two_of_four.peak_hz)
    assert two_of_four.reason.startswith("2 of at least 3 channels")
    assert np.isfinite(individual_alpha_frequency(GRID_HZ, np.stack([alpha] * 2)).peak_hz)
    assert np.isfinite(individual_alpha_frequency(GRID_HZ, alpha[None]).peak_hz)
    assert np.isnan(individual_alpha_frequency(GRID_HZ, np.stack([alpha, none])).peak_hz)


def test_peak_must_exceed_its_rivals_by_a_fifth():
    # 20 %: Corcoran et al. 2018. The centre of gravity does not need a single peak.
    def found(height):
        power = 0.05 + np.exp(-((GRID_HZ - 8.5) ** 2) / 0.5)
        power += height * np.exp(-((GRID_HZ - 11.5) ** 2) / 0.5)
        return individual_alpha_frequency(GRID_HZ, np.tile(power, (3, 1)))

    equal = found(1.1)
    assert np.isnan(equal.peak_hz)
    assert "one peak above its rivals" in equal.reason
    assert (equal.n_channels_peak, equal.n_channels_centre) == (0, 3)
    # Weighted mean of both centres, but for the tails where the peaks sink into the background.
    np.testing.assert_allclose(equal.centre_of_gravity_hz, (8.5 + 1.1 * 11.5) / 2.1, atol=0.05)
    np.testing.assert_allclose(found(1.4).peak_hz, 11.5, atol=0.025)


def test_channels_with_a_clearer_peak_weigh_more():
    strong, weak = spectrum(1, 1, (10.5, 1.2, 1)), spectrum(1, 1, (9.5, 0.5, 1))
    found = individual_alpha_frequency(GRID_HZ, np.stack([strong, weak, weak]))
    assert 10 < found.peak_hz < 10.5
    # Only the shape of a channel's spectrum counts, not its unit or its distance from the source.
    scaled = individual_alpha_frequency(GRID_HZ, np.stack([strong * 0.001, weak, weak * 50]))
    np.testing.assert_allclose(scaled.peak_hz, found.peak_hz, rtol=1e-9)
    np.testing.assert_allclose(
        scaled.centre_of_gravity_hz, found.centre_of_gravity_hz, rtol=1e-6
    )  # the aperiodic fit iterates


def test_excluded_tags_do_not_hide_alpha():
    power = spectrum(1, 1, (10, 0.5, 1))
    tags_hz = (15, 20, 30)
    for tag_hz in tags_hz:
        power[np.abs(GRID_HZ - tag_hz) <= 0.5] *= 1e4
    power = np.tile(power, (3, 1))
    assert np.isnan(individual_alpha_frequency(GRID_HZ, power).peak_hz)
    found = individual_alpha_frequency(GRID_HZ, power, exclude_hz=tags_hz)
    np.testing.assert_allclose(found.peak_hz, highest_hz(1, 1, (10, 0.5, 1)), atol=0.05)


def test_alpha_frequency_refuses_what_it_cannot_use():
    with pytest.raises(DataError, match="too coarse"):
        individual_alpha_frequency(np.arange(1, 41, 0.5), np.ones((3, 80)) * 2)
    power = np.tile(spectrum(0, 1), (3, 1))
    power[1] = 0
    with pytest.raises(DataError, match="Is a channel flat"):
        individual_alpha_frequency(GRID_HZ, power)


# Power


def test_band_power_of_a_sinusoid_and_of_noise():
    from scipy.signal import welch

    # Parseval: a sinusoid of amplitude A holds A²/2, whatever the taper. White noise of variance
    # σ² has the density 2σ²/fs (Welch 1967): 5 Hz of it hold 2·4·5/250 = 0.16 µV².
    t = np.arange(20 * RATE_HZ) / RATE_HZ
    frequencies_hz, psd = welch(3 * np.cos(2 * np.pi * 10 * t), RATE_HZ, "hann", 2 * RATE_HZ)
    np.testing.assert_allclose(band_power(frequencies_hz, psd, 8, 13), 4.5, rtol=1e-4)

    noise = np.random.default_rng(0).normal(0, 2, (20, 200 * RATE_HZ))
    frequencies_hz, psd = welch(noise, RATE_HZ, "hann", 2 * RATE_HZ)
    power = band_power(frequencies_hz, psd, 8, 13)
    assert power.shape == (20,)
    # 20 channels × 1000 independent coefficients: three standard errors of 0.7 % are allowed.
    np.testing.assert_allclose(power.mean(), 0.16, rtol=0.021)


def test_band_power_interpolates_its_edges():
    frequencies_hz = np.arange(0, 41, 0.5)
    # A density of f integrates to (high² − low²)/2, on and between bins, within one bin as well.
    for low_hz, high_hz in [(8, 13), (8.1, 12.3), (9.05, 9.35), (0, 40)]:
        np.testing.assert_allclose(
            band_power(frequencies_hz, frequencies_hz, low_hz, high_hz),
            (high_hz**2 - low_hz**2) / 2,
            rtol=1e-12,
        )
    with pytest.raises(DataError, match="within the spectrum"):
        band_power(frequencies_hz, frequencies_hz, 38, 41)


def test_periodic_power_is_what_stands_above_the_aperiodic_part():
    frequencies_hz = np.arange(0, 40.01, 0.25)
    fit = AperiodicFit(offset=1.0, exponent=1.0, r_squared=1.0)
    peak = 2 * np.exp(-((frequencies_hz - 10) ** 2) / (2 * 0.8**2))
    aperiodic = 10 / np.maximum(frequencies_hz, 0.25)
    # The Gaussian's integral is 2·0.8·√(2π) µV²; its tails outside ± 4 Hz are below 1e-6 of it.
    found = periodic_power(frequencies_hz, peak + aperiodic, fit, 6, 14)
    np.testing.assert_allclose(found, 1.6 * np.sqrt(2 * np.pi), rtol=1e-5)
    assert periodic_power(frequencies_hz, 0.9 * aperiodic, fit, 6, 14) < 0


def test_relative_power_and_lateralisation():
    flat = np.full((2, GRID_HZ.size), 3.0)
    np.testing.assert_allclose(relative_power(GRID_HZ, flat, 8, 13), 5 / 38, rtol=1e-12)
    found = lateralisation(np.array([3.0, 1.0, 0.0]), np.array([1.0, 1.0, 2.0]))
    np.testing.assert_allclose(found, [0.5, 0, -1])
