"""Invented people with every artifact that cleaning is for, over artifact-free brains of the demo.

The brains and blinks are those of the demo's program, at 400 Hz, so that the third harmonic of the
mains can be held. Added here: saccades, lids that flutter while closed, muscle of the jaw and of
the neck, which lies below the occipital channels, the heart, and mains hum that drifts. Bad
channels and movement are left out: nothing but interpolation or leaving out helps against them.
The sizes are common practice: a blink of 150-250 µV at Fp1 and Fp2, fluttering lids of 40-80 µV,
10 µV between F8 and F7 for a degree of gaze, bursts of jaw and neck of 15-50 µV (RMS), whose
spectrum reaches down to 10 Hz, a heart of 8-15 µV, mains of 3-15 µV.
"""

import importlib.util
import sys
from pathlib import Path

import numpy as np

CODE = Path(__file__).parents[1] / "demo_bids" / "code" / "demo_signals.py"
RATE_HZ = 400


def signals_at(rate_hz):
    """An instance of the demo's module with a rate of its own."""
    spec = importlib.util.spec_from_file_location(f"demo_signals_{rate_hz}_hz", CODE)
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module  # dataclasses look their module up
    spec.loader.exec_module(module)
    module.RATE_HZ = rate_hz
    return module


signals = signals_at(RATE_HZ)
PEOPLE = tuple(
    signals.Person(str(number), 30 + number % 20, "FM"[number % 2], "day")
    for number in range(21, 29)
)

# Where the fibres of each muscle lie: azimuths (0 front, 90 right) and elevation.
MUSCLES = (
    ("left jaw", (-75, -90, -105), -8),
    ("right jaw", (75, 90, 105), -8),
    ("neck", (-160, 180, 160), -25),
)
BURSTS_PER_MIN = 1.0
MUSCLE_HZ = (10.0, 150.0)
DEGREE_UV = 10.0  # between F8 and F7
PANEL_DEG = 6.0
FIXATION_DEG = {"trial": 1.5, "other": 4.0}  # scatter of the gaze about its goal
FLUTTERS = 2  # episodes while the eyes are closed
COUPLING_S = 1.6  # time constant of an amplifier with a high-pass of 0.1 Hz
BEATS_PER_MIN = 70.0
THIRD_HARMONIC_SHARE = 0.2


def simulate(person, n_trials):
    """Artifact-free recording of a person, and the same signal with artifacts, in µV."""
    brain = signals.simulate(person, n_trials, with_artifacts=False)
    traits = signals.draw_traits(signals.stream(person, "traits"))
    n_times = brain.signal_uv.shape[1]
    blink_map, gaze_map = signals.eye_topographies()
    blinks, _ = signals.blinks(
        brain.blocks, n_times, traits.blink_uv, signals.stream(person, "blinks")
    )
    blinks += flutter(brain.blocks, n_times, signals.stream(person, "flutter"))
    coupled = int(person.label) % 2 == 0
    saccades = gaze(brain.blocks, n_times, coupled, signals.stream(person, "saccades"))
    dirty = brain.signal_uv + np.outer(blink_map, blinks) + np.outer(gaze_map, saccades)
    for name, azimuths_deg, elevation_deg in MUSCLES:
        rng = signals.stream(person, name)
        dirty += muscle(n_times, azimuths_deg, elevation_deg, rng)
    dirty += heart(n_times, signals.stream(person, "heart"))
    dirty += mains(n_times, traits.mains_hz, signals.stream(person, "hum"))
    return brain, dirty


def gaze(blocks, n_times, coupled, rng):
    """Horizontal gaze in µV between F8 and F7: one or two saccades a second.

    They are steps of 40 ms, which last, or die away where the amplifier is coupled by a capacitor.
    In a trial the goal is the watched panel, and the eyes stay near it; they move under closed lids
    as they do in the dark.
    """
    goal_deg, scatter_deg = np.zeros(n_times), np.full(n_times, FIXATION_DEG["other"])
    for block in blocks:
        stretch = slice(block.start - signals.samples(0.35), block.stop)
        if block.is_trial:
            goal_deg[stretch] = PANEL_DEG if block.kind == "watch_right" else -PANEL_DEG
            scatter_deg[stretch] = FIXATION_DEG["trial"]
    around, at = np.zeros(n_times), 0
    while at < n_times:
        stop = at + signals.samples(rng.uniform(0.3, 1.5))
        around[at:stop] = rng.standard_normal()
        at = stop
    course_uv = signals.smooth(DEGREE_UV * (goal_deg + scatter_deg * around), 0.04)
    return through_capacitor(course_uv) if coupled else course_uv


def flutter(blocks, n_times, rng):
    """Closed lids that flutter at 5 to 9 Hz for a second or more, in µV at Fp1 and Fp2."""
    course_uv = np.zeros(n_times)
    for block in blocks:
        if block.kind != "rest_closed":
            continue
        onsets_s = block.onset_s + rng.uniform(1, block.duration_s - 4, FLUTTERS)
        for onset_s in onsets_s:
            n = signals.samples(rng.uniform(1, 3))
            turns = rng.uniform(5, 9) * np.arange(n) / RATE_HZ
            start = signals.samples(onset_s)
            size_uv = rng.uniform(40, 80)
            course_uv[start : start + n] += size_uv * np.hanning(n) * np.sin(2 * np.pi * turns)
    return course_uv


def through_capacitor(course_uv):
    """High-pass of first order, as an amplifier's coupling has it."""
    from scipy.signal import lfilter

    return lfilter([1, -1], [1, -np.exp(-1 / (COUPLING_S * RATE_HZ))], course_uv)


def muscle(n_times, azimuths_deg, elevation_deg, rng):
    """Bursts of one muscle: three bundles of fibres, each of its own noise."""
    offsets = 0.083 * np.array([signals.direction(a, elevation_deg) for a in azimuths_deg])
    columns = signals.lead_field(offsets, offsets / 0.083 + 0.5 * rng.standard_normal((3, 3)))
    signal = np.zeros((len(signals.CHANNELS), n_times))
    minutes = n_times / RATE_HZ / 60
    for onset_s in rng.uniform(1, 60 * minutes - 4, rng.poisson(BURSTS_PER_MIN * minutes)):
        n = signals.samples(rng.uniform(0.5, 2.5))
        burst = columns @ signals.coloured_noise((3, n), 0.3, 20, rng, MUSCLE_HZ)
        burst *= signals.smooth(np.r_[0.0, np.ones(n - 2), 0.0], 0.1)
        rms_uv = np.sqrt((burst**2).mean(axis=1)).max()
        start = signals.samples(onset_s)
        signal[:, start : start + n] += burst * rng.uniform(15, 50) / rms_uv
    return signal


def heart(n_times, rng):
    """QRS complexes with T waves, about 70 a minute, larger the further left and down a channel."""
    positions, _ = signals.electrodes()
    down_left = np.array([-0.7, 0.0, -0.7]) + rng.normal(0, 0.2, 3)
    reference = positions[signals.REFERENCE]
    heart_map = np.array([(positions[c] - reference) @ down_left for c in signals.CHANNELS])
    time_s = np.arange(-signals.samples(0.1), signals.samples(0.45)) / RATE_HZ
    waves = ((-0.1, -0.03, 0.01), (1.0, 0.0, 0.012), (-0.25, 0.03, 0.012), (0.2, 0.25, 0.05))
    beat = sum(size * np.exp(-(((time_s - at) / width) ** 2) / 2) for size, at, width in waves)
    course = np.zeros(n_times)
    at_s = rng.uniform(0.2, 1.0)
    while signals.samples(at_s + 0.5) < n_times:
        start = signals.samples(at_s - 0.1)
        course[start : start + beat.size] += beat
        at_s += 60 / BEATS_PER_MIN * rng.normal(1, 0.04)
    return rng.uniform(8, 15) * np.outer(heart_map / np.abs(heart_map).max(), course)


def mains(n_times, mains_hz, rng):
    """Hum of the mains and its third harmonic, whose size drifts over tens of seconds."""
    time_s = np.arange(n_times) / RATE_HZ
    n_channels = len(signals.CHANNELS)
    size_uv = rng.uniform(3, 15, (n_channels, 1))
    drift = 1 + 0.4 * signals.coloured_noise((1, n_times), 2.0, 0.02, rng, (0, 0.1))
    hum = np.zeros((n_channels, n_times))
    for multiple, share in ((1, 1.0), (3, THIRD_HARMONIC_SHARE)):
        phase = rng.uniform(-np.pi, np.pi, (n_channels, 1))
        hum += share * np.cos(2 * np.pi * multiple * mains_hz * time_s + phase)
    return size_uv * drift * hum
