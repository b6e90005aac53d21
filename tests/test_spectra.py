"""Coefficients and power spectra against closed forms, tables and scipy's and mne's spectra."""

import math

import numpy as np
import pytest
from onbin import spectra, tagging
from realdata import LED_TAGS_HZ, led_dataset, require, weeg_dataset


def wave(rate_hz, n, *parts):
    t = np.arange(n) / rate_hz
    return sum(a * np.cos(2 * np.pi * f * t + phase) for a, f, phase in parts)


def test_on_bin_sinusoids_are_read_exactly():
    # closed form: 2|X|/N on exact bins
    x = wave(500, 5000, (3, 12, 0.7), (1.2, 24, -1.1))
    found = spectra.project(x, 500, [12, 24, 13])
    np.testing.assert_allclose(np.abs(found), [3, 1.2, 0], atol=1e-3)
    np.testing.assert_allclose(np.angle(found[:2]), [0.7, -1.1], atol=1e-3)


@pytest.mark.parametrize("frequency_hz", [12.0, 12.05, 8.1777, 120 / 7])
def test_a_sinusoid_a_mean_and_a_trend_are_told_apart_exactly(frequency_hz):
    x = wave(256, 700, (2.0, frequency_hz, 0.4)) + 40 + 0.3 * np.arange(700)
    found = spectra.project(x, 256, [frequency_hz])[0]
    assert found == pytest.approx(2.0 * np.exp(0.4j), abs=1e-9)  # least squares without noise


def test_agrees_with_scipy_and_mne_on_bin():
    import mne
    from scipy.signal import periodogram

    x = wave(250, 1000, (3, 12, 0.2))  # cosine: symmetric about no ramp once detrended
    frequencies, power = periodogram(x, fs=250, window="boxcar", detrend=False, scaling="spectrum")
    at = np.flatnonzero(frequencies == 12)[0]
    ours = np.abs(spectra.project(x, 250, [12.0])[0]) ** 2 / 2
    assert ours == pytest.approx(power[at], rel=1e-9)
    psd, grid = mne.time_frequency.psd_array_welch(
        x, 250, n_fft=1000, window="boxcar", remove_dc=False, verbose="error"
    )
    assert ours == pytest.approx(psd[grid == 12][0] * grid[1], rel=1e-9)


def test_phases_are_referred_to_the_onset():
    rate_hz, onset_s = 200, 1.2345
    n = np.arange(400) + 300
    t = n / rate_hz
    x = 2 * np.cos(2 * np.pi * 14.4 * (t - onset_s) + 0.5)
    raw = spectra.project(x, rate_hz, [14.4])[None]
    found = spectra.to_onset(raw, np.array([14.4]), np.array([300 / rate_hz - onset_s]))
    assert np.angle(found[0, 0]) == pytest.approx(0.5, abs=1e-9)


@pytest.mark.parametrize("rate_hz", [256, 300, 512, 1000 / 3])
@pytest.mark.parametrize("amplitude_uv", [0.05, 1.0, 20.0])
@pytest.mark.parametrize("frequency_hz", [7.5, 8.1777, 120 / 7])
def test_amplitudes_and_phases_are_recovered_at_odd_rates(rate_hz, amplitude_uv, frequency_hz):
    n = round(3 * rate_hz)
    x = wave(rate_hz, n, (amplitude_uv, frequency_hz, 1.0), (amplitude_uv / 3, 3 * frequency_hz, 0))
    found = spectra.project(x, rate_hz, [frequency_hz])[0]
    # the third harmonic leaks into a window of broken cycles: less than 1/(π·cycles between) of it
    assert abs(found) == pytest.approx(amplitude_uv, rel=5e-3)


def test_sines_of_a_published_file_are_read_as_their_amplitude():
    # pyedflib's test_generator.edf: sines of 100 µV nominal, 99.98 measured; 8.1777 Hz is off every
    # bin of its 600 s
    import mne

    folder = require("edf-generator")
    raw = mne.io.read_raw_edf(folder / "edf-generator" / "test_generator.edf", verbose="error")
    data_uv = raw.get_data() * 1e6
    for frequency_hz in (1, 8, 8.1777, 8.5, 15, 17, 50):
        largest = np.abs(spectra.project(data_uv, 200, [frequency_hz])).max()
        assert largest == pytest.approx(99.98, abs=0.1)


def test_sinusoids_are_removed_with_their_power_told():
    rng = np.random.default_rng(2)
    noise = rng.normal(size=1000)
    x = noise + wave(200, 1000, (4, 10, 0.3), (2, 12.3, 1))
    left, removed_uv2 = spectra.remove_sinusoids(x, 200, [10, 12.3])
    np.testing.assert_allclose(removed_uv2, [8, 2], rtol=0.15)  # noise: 2σ/√N on 4 and 2 µV
    assert np.std(left - noise) < 0.15
    same, nothing = spectra.remove_sinusoids(x, 200, [])
    np.testing.assert_array_equal(same, x)
    assert nothing.shape == (0,)


# coherent gain and equivalent noise bandwidth of the periodic Hann window: 0.5 and 1.5 bins, exact
# (Harris 1978, Table 1, from memory; closed form for cosine sums)
def test_density_of_a_sine_is_what_the_hann_window_makes_of_it():
    x = wave(500, 5000, (3, 12, 0.7))
    frequencies, psd = spectra.power_spectral_density(x, 500, 10.0, 0.1)
    # (A²/2)·T/ENBW = 4.5·10/1.5; linear detrending takes 1e-4 of a sine
    assert psd[np.argmin(abs(frequencies - 12))] == pytest.approx(30.0, rel=1e-3)


def test_density_of_white_noise():
    # 2σ²/fs = 0.016 µV²/Hz
    x = 2 * np.random.default_rng(3).normal(size=(50, 20_000))
    frequencies, psd = spectra.power_spectral_density(x, 500, 2.0, 0.25)
    inside = (frequencies > 2) & (frequencies < 248)
    # 50 × 39 half-overlapping segments: standard error of the mean over bins below 0.2 %
    assert psd[:, inside].mean() == pytest.approx(0.016, rel=5e-3)


def test_density_integrates_to_the_variance():
    x = wave(500, 5000, (3, 12, 0.7), (1.2, 24, -1.1))
    frequencies, psd = spectra.power_spectral_density(x, 500, 2.0, 0.25)
    assert np.trapezoid(psd, frequencies) == pytest.approx(5.22, rel=2e-3)  # Parseval


def test_scalloping_of_a_sine_between_bins():
    # boxcar loses 20·log10(2/π) = 3.92 dB half a bin off; projection at the exact place loses none
    x = wave(500, 5000, (3, 12.05, 0.0))
    on_bins = np.abs(2 * np.fft.rfft(x) / 5000).max()
    assert 20 * math.log10(on_bins / 3) == pytest.approx(-3.92, abs=0.05)  # negative frequencies
    assert np.abs(spectra.project(x, 500, [12.05])[0]) == pytest.approx(3, abs=1e-9)


def test_square_wave_harmonics():
    # ±1 square wave of half duty: 4/(πk) at odd k, sampled at 50 samples a cycle
    cycle = np.where(np.arange(50) < 25, 1.0, -1.0)
    found = np.abs(spectra.project(np.tile(cycle, 20), 500, [10, 20, 30, 50]))
    np.testing.assert_allclose(found, [1.2741, 0, 0.4269, 0.2589], atol=5e-3)  # ramp in a half wave


def test_bin_coefficients_measure_each_term_in_its_own_window():
    rate_hz = 200
    signal = np.stack([wave(rate_hz, 3000, (1.5, 14.32, 0), (0.7, 18, 0.5))])
    found = spectra.bin_coefficients(
        signal,
        starts=np.array([100, 1100]),
        offsets_s=np.array([0.5, 5.5]),
        rate_hz=rate_hz,
        frequencies_hz=np.array([14.32, 18.0]),
        samples=np.array([489, 500]),
        bins=np.array([0, -2, 2]),
    )
    assert found.shape == (2, 1, 2, 3)
    # the other sinusoid leaks less than 1/(π·9 bins)·its amplitude
    np.testing.assert_allclose(np.abs(found[:, 0, :, 0]), [[1.5, 0.7]] * 2, atol=0.06)
    # both windows start at onset + the same phase of the wave, so phases agree when referred
    assert np.angle(found[0, 0, 1, 0]) == pytest.approx(np.angle(found[1, 0, 1, 0]), abs=0.05)


def plain_snr(signal_uv, rate_hz, frequency_hz):
    """Power at a frequency over the mean of ten bins on each side, skipping one."""
    width_hz = rate_hz / len(signal_uv)
    beside = np.array(tagging.neighbour_offsets(10, 1)) * width_hz
    found = np.abs(spectra.project(signal_uv, rate_hz, frequency_hz + np.r_[0, beside])) ** 2
    return found[0] / found[1:].mean()


@pytest.mark.parametrize(
    ("person", "hz", "snr"), [("05", 8, 65.8), ("04", 7, 53.8), ("01", 8, 35.8), ("02", 6, 6.0)]
)
def test_published_lights_have_the_snr_that_was_found_by_other_means(tmp_path, person, hz, snr):
    # Kołodziej et al., Warsaw University of Technology: Oz over the whole 30 s, unwindowed
    import mne

    dataset = led_dataset(tmp_path / "led")
    run = LED_TAGS_HZ.index(hz) + 1
    path = dataset / f"sub-{person}/eeg/sub-{person}_task-led_run-{run}_eeg.vhdr"
    raw = mne.io.read_raw_brainvision(path, verbose="error")
    signal_uv = raw.get_data(picks=["Oz"])[0] * 1e6
    assert plain_snr(signal_uv, 256, hz) == pytest.approx(snr, rel=0.02)  # the trend alone differs


def test_a_display_of_60_hz_shows_its_ninth_part_not_6_6_hz(tmp_path):
    # weeg-vnu (MIT): nominal 6.6 Hz, truly 60/9; ten seconds after each marker
    import mne

    dataset = weeg_dataset(tmp_path / "weeg")
    path = dataset / "sub-01/eeg/sub-01_task-flicker_run-1_eeg.vhdr"
    raw = mne.io.read_raw_brainvision(path, verbose="error")
    signal_uv = raw.get_data().mean(axis=0) * 1e6
    for onset_s in (1, 21, 41, 61):
        block = signal_uv[(onset_s + 1) * 256 : (onset_s + 10) * 256]
        assert plain_snr(block, 256, 60 / 9) > 6  # 6 to 28 by channel in the recordings' notes
        # 0.067 Hz lose 5.9 dB in 9 s at the tag (sinc of 0.6 bins), and all at the harmonic
        assert plain_snr(block, 256, 2 * 6.6) < plain_snr(block, 256, 2 * 60 / 9) / 4
