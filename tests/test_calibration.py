"""Calibration of the whole measuring chain: continuous noise, windows, coefficients, tests.

Geometry is the demo's: 200 Hz, 10 trials of 3 windows of 500 samples, tags of 14.4 and 18 Hz, 10
neighbouring bins on each side beyond 1. Noise is Gaussian with power falling as 1/f^exponent above
the demo's high-pass of 0.5 Hz. Seeds are fixed.

What sloping noise does, over 10 000 simulations (rates at a level of 5 %):

- T²circ, Hotelling and Rayleigh do not use the neighbours and keep their level everywhere.
- The F test of the SNR takes the neighbours' mean for the noise at the term. Where the spectrum is
  curved that mean is too large and the test too careful; where bins below the term are missing, for
  they would lie at zero, it is too small and the test too ready. `expected_rate` tells by how much.
"""

from fractions import Fraction
from functools import cache

import numpy as np
import pytest
import scipy.fft
from onbin import response, spectra, tagging
from scipy import stats

RATE_HZ, N_SAMPLES, HIGHPASS_HZ, PASSBAND_HZ = 200, 500, 0.5, 90.0
TRIALS, PER_TRIAL, TRIAL_S, SKIP_S = 10, 3, 8.0, 0.5
BINS = np.array([0, *tagging.neighbour_offsets(10, 1)])
TAG = Fraction(72, 5)
LOW, THETA, ALPHA = Fraction(2), Fraction(6), Fraction(10)
CHUNK = 250
DETECTION = ("t2circ_p", "hotelling_p", "rayleigh_p")


def starts():
    """First samples of the windows, and their times from onset."""
    onsets_s = np.repeat(np.arange(TRIALS) * TRIAL_S, PER_TRIAL)
    offsets_s = SKIP_S + np.tile(np.arange(PER_TRIAL), TRIALS) * N_SAMPLES / RATE_HZ
    return np.round((onsets_s + offsets_s) * RATE_HZ).astype(int), offsets_s


def noise_amplitude(n_times, exponent):
    """Standard deviation of each part of the noise's Fourier coefficients."""
    frequencies_hz = np.fft.rfftfreq(n_times, 1 / RATE_HZ)
    amplitude = np.zeros(len(frequencies_hz))
    passed = frequencies_hz >= (HIGHPASS_HZ if exponent else 0)
    # 1 at the tag, so that rates do not hang on the unit
    amplitude[passed] = (np.maximum(frequencies_hz[passed], 1e-9) / float(TAG)) ** (-exponent / 2)
    return frequencies_hz, amplitude


def noise(rng, n_sites, n_times, exponent):
    """Continuous noise, shape (n_sites, n_times)."""
    _, amplitude = noise_amplitude(n_times, exponent)
    parts = rng.standard_normal((n_sites, 2 * len(amplitude)), dtype=np.float32)
    return scipy.fft.irfft(parts.view(np.complex64) * amplitude.astype(np.float32), n_times)


def usable(frequency):
    offsets, duration_s = BINS[1:].tolist(), Fraction(N_SAMPLES, RATE_HZ)
    return tagging.usable_neighbours(frequency, offsets, duration_s, [], PASSBAND_HZ)


def chain(signal_uv, frequency, phase_locked=True):
    """Measure continuous signals at a frequency, as the steps spectra and response do."""
    windows, offsets_s = starts()
    at_hz, samples = np.array([float(frequency)]), np.array([N_SAMPLES])
    found = spectra.bin_coefficients(signal_uv, windows, offsets_s, RATE_HZ, at_hz, samples, BINS)
    found = found[:, :, 0]
    return response.measures(found[..., 0], found[..., 1:][..., usable(frequency)], phase_locked)


@cache
def null_p(exponent, frequencies, n, seed):
    """Values of p of every test without a response, by frequency and test."""
    rng = np.random.default_rng(seed)
    found = {frequency: {} for frequency in frequencies}
    for _ in range(n // CHUNK):
        signal_uv = noise(rng, CHUNK, round(TRIALS * TRIAL_S * RATE_HZ) + 100, exponent)
        for frequency in frequencies:
            measured = chain(signal_uv, frequency)
            measured["total_snr_p"] = response.snr_p(
                measured["total_power_uv2"] / measured["total_noise_uv2"],
                measured["neighbours"],
                measured["windows"],
            )
            for test in (*DETECTION, "snr_p", "total_snr_p", "condition_index_p"):
                found[frequency].setdefault(test, []).append(measured[test])
    return {f: {k: np.concatenate(v) for k, v in of_f.items()} for f, of_f in found.items()}


def expected_power(frequencies_hz, exponent):
    """Mean |X|² of the noise at frequencies, leakage included."""
    n_times = round(TRIALS * TRIAL_S * RATE_HZ) + 100
    grid_hz, amplitude = noise_amplitude(n_times, exponent)
    waves = np.exp(2j * np.pi * np.outer(np.arange(N_SAMPLES), grid_hz) / RATE_HZ)
    operator = spectra.projector(N_SAMPLES, RATE_HZ, frequencies_hz)
    gain = abs(operator @ waves) ** 2 + abs(operator @ waves.conj()) ** 2
    return gain @ (2 * amplitude**2) / n_times**2


def expected_rate(frequency, exponent, level):
    """How often the F test is positive without a response, where the noise is not level.

    With independent circular Gaussian bins of mean powers P the ratio exceeds a threshold c with
    the probability Π 1/(1 + c·P_j/(B·P_0)), since powers are then exponentially distributed.
    """
    used = BINS[1:][usable(frequency)]
    at_hz = float(frequency) + np.array([0, *used]) * RATE_HZ / N_SAMPLES
    own, *beside = expected_power(at_hz, exponent)
    threshold = stats.f.isf(level, 2, 2 * len(beside))
    return np.prod(1 / (1 + threshold * np.array(beside) / (len(beside) * own)))


def assert_rate(p, level, expected=None):
    """See that a rate lies in the binomial 99 % interval of what is expected."""
    hits = int(np.sum(p < level))
    assert stats.binomtest(hits, len(p), expected or level).pvalue > 0.01, f"{hits / len(p):.4f}"


# --- without a response --------------------------------------------------------------------------


@pytest.mark.parametrize("level", [0.05, 0.01])
@pytest.mark.parametrize("exponent", [0, 1, 2])
@pytest.mark.parametrize("test", DETECTION)
def test_detection_keeps_its_level(test, exponent, level):
    assert_rate(null_p(exponent, (TAG,), 10_000, 1)[TAG][test], level)


@pytest.mark.parametrize("level", [0.05, 0.01])
@pytest.mark.parametrize("exponent", [0, 1, 2])
def test_f_test_follows_the_slope_of_the_noise(exponent, level):
    expected = expected_rate(TAG, exponent, level)
    assert_rate(null_p(exponent, (TAG,), 10_000, 1)[TAG]["snr_p"], level, expected)
