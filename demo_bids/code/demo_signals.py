"""The simulated people of the demo dataset: who they are, and what their EEG is made of.

Everything here is a pure function of a person, a number of trials and random streams; no file is
touched. Signals are float64 arrays of shape (n_channels, n_times) in µV against the recording
reference. What is planted is returned beside the signal, so that the truth is never computed from
the noisy data.

The forward model is a sphere of four shells (mne's), with electrodes on it. Sources:

- two occipital dipoles that follow the flicker, each mostly that of the opposite panel;
- two parieto-occipital dipoles that share one narrow-band alpha rhythm;
- a cloud of background dipoles with a 1/f spectrum;
- ocular and temporal-muscle dipoles for the artifacts.
"""

from dataclasses import dataclass, field
from functools import cache

import numpy as np

SEED = 20_144
RATE_HZ = 200
CHANNELS = (
    *("Fp1", "Fp2", "F7", "F3", "F4", "F8", "T7", "C3", "Cz", "C4", "T8", "P7"),
    *("P3", "Pz", "P4", "P8", "PO7", "PO3", "POz", "PO4", "PO8", "O1", "Oz", "O2"),
)
REFERENCE = "FCz"
REGION = ("O1", "Oz", "O2")  # where planted amplitudes are defined, after average reference

NOMINAL_REFRESH_HZ = 144.0
FRAMES = {"left": 10, "right": 8}  # frames a cycle of each panel

REST_S = 24.0
TRIAL_S = 8.0
PAUSE_S = 1.0  # before the first block and after the last trial
REST_GAP_S = 2.0
GAP_S = (0.8, 1.2)  # between trials, drawn anew each time

# The slow latent g ("engagement") multiplies the response by 1 + RESPONSE_PER_G * g and the alpha
# amplitude by exp(-ALPHA_PER_G * g).
RESPONSE_PER_G = 0.22
ALPHA_PER_G = 0.28
ALPHA_WIDTH_HZ = 0.5  # full width at half maximum


# --- people ---------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Person:
    """An invented person, and what went wrong in their recording.

    Attributes
    ----------
    label : str
        BIDS label.
    age : int
        Age in years.
    sex : str
        ``"F"`` or ``"M"``.
    shift : str
        The shift the person worked on the day before: ``"day"`` or ``"night"``.
    refresh_hz : float
        What the display really ran at.
    bad_channels : dict of str to str
        Kind of fault by channel: ``"flat"``, ``"noisy"``, ``"drifting"`` or ``"popping"``.
    marked_bad : tuple of str
        The bad channels that ``channels.tsv`` owns up to.
    moving_share : float
        Share of the trials during which the person moves.
    lost_share : float
        Share of the trials whose markers were lost.
    """

    label: str
    age: int
    sex: str
    shift: str
    refresh_hz: float = NOMINAL_REFRESH_HZ
    bad_channels: dict[str, str] = field(default_factory=dict)
    marked_bad: tuple[str, ...] = ()
    moving_share: float = 0.0
    lost_share: float = 0.0


PEOPLE = (
    Person("01", 27, "F", "day"),
    Person("02", 45, "M", "night", bad_channels={"F7": "flat"}, marked_bad=("F7",)),
    Person("03", 33, "F", "night", bad_channels={"T8": "noisy"}),
    Person("04", 52, "M", "day"),
    Person("05", 38, "F", "day", refresh_hz=143.2),
    Person("06", 24, "M", "night", moving_share=0.9),
    Person("07", 58, "F", "day", bad_channels={"F8": "drifting"}, lost_share=0.25),
    Person("08", 41, "M", "night", bad_channels={"F3": "popping", "C4": "flat"}),
)


def stream(person: Person, name: str) -> np.random.Generator:
    """Return a person's own random stream for one ingredient.

    Separate streams keep the brain's signals the same when the artifacts are left out.
    """
    return np.random.default_rng([SEED, int(person.label), *name.encode()])


@dataclass(frozen=True)
class Traits:
    """What differs from person to person, with units in the names."""

    response_uv: dict[str, float]  # first harmonic of each panel when it is not watched
    second_harmonic_share: float
    watched_factor: float
    alpha_hz: float
    alpha_rms_uv: dict[str, float]  # by state: open, closed, watching
    background_rms_uv: float
    background_exponent: float
    blink_uv: float
    mains_hz: float


def draw_traits(rng: np.random.Generator) -> Traits:
    """Draw one person's traits."""
    alpha_open_uv = rng.uniform(3.0, 4.0)
    return Traits(
        response_uv={"left": rng.uniform(1.0, 1.7), "right": rng.uniform(1.0, 1.7)},
        second_harmonic_share=rng.uniform(0.28, 0.38),
        watched_factor=rng.normal(1.35, 0.05),
        alpha_hz=rng.uniform(8.8, 11.2),
        alpha_rms_uv={
            "open": alpha_open_uv,
            "closed": rng.uniform(2.7, 3.3) * alpha_open_uv,
            "watching": 0.9 * alpha_open_uv,
        },
        background_rms_uv=rng.uniform(9.0, 13.0),
        background_exponent=rng.uniform(1.3, 1.6),
        blink_uv=rng.uniform(150.0, 250.0),
        mains_hz=rng.uniform(49.98, 50.02),
    )


# --- time table -----------------------------------------------------------------------------------


@dataclass(frozen=True)
class Block:
    """A rest or a trial: where it lies, and what is planted in it.

    ``g`` is the latent of a trial (0 in a rest). ``marked`` says whether the recording kept the
    marker, ``moving`` whether the person moves throughout.
    """

    kind: str  # rest_open, rest_closed, watch_left, watch_right
    start: int  # sample
    stop: int
    g: float = 0.0
    marked: bool = True
    moving: bool = False

    @property
    def is_trial(self) -> bool:
        """Whether the panels flicker."""
        return self.kind.startswith("watch")

    @property
    def onset_s(self) -> float:
        """Onset in seconds from the first sample."""
        return self.start / RATE_HZ

    @property
    def duration_s(self) -> float:
        """Duration in seconds."""
        return (self.stop - self.start) / RATE_HZ


def samples(seconds: float) -> int:
    """Return the number of samples nearest to a time."""
    return round(seconds * RATE_HZ)


def balanced_scores(n: int, rng: np.random.Generator) -> np.ndarray:
    """Return ``n`` evenly spaced scores in random order, of mean 0 and standard deviation 1."""
    if n < 2:
        return np.zeros(n)
    scores = np.linspace(-1, 1, n)
    return rng.permutation(scores / scores.std())


def make_blocks(person: Person, n_trials: int) -> list[Block]:
    """Lay out the recording: a rest with eyes open, one with eyes closed, then the trials.

    Half of the trials (rounded up) are ``watch_left``. The latent averages to exactly 0 over the
    marked trials of each condition, and over the unmarked ones, so that the planted condition
    means hold for whoever sees only the markers.
    """
    rng = stream(person, "blocks")
    n_left = (n_trials + 1) // 2
    kinds = rng.permutation(["watch_left"] * n_left + ["watch_right"] * (n_trials - n_left))
    lost = np.zeros(n_trials, bool)
    lost[rng.choice(n_trials, round(person.lost_share * n_trials), replace=False)] = True
    moving = np.zeros(n_trials, bool)
    moving[rng.choice(n_trials, round(person.moving_share * n_trials), replace=False)] = True
    g = np.zeros(n_trials)
    for kind in ("watch_left", "watch_right"):
        for group in ((kinds == kind) & ~lost, (kinds == kind) & lost):
            g[group] = balanced_scores(group.sum(), rng)

    blocks, at = [], samples(PAUSE_S)
    for kind in ("rest_open", "rest_closed"):
        blocks.append(Block(kind, at, at + samples(REST_S)))
        at = blocks[-1].stop + samples(REST_GAP_S)
    for i in range(n_trials):
        stop = at + samples(TRIAL_S)
        blocks.append(Block(str(kinds[i]), at, stop, float(g[i]), not lost[i], bool(moving[i])))
        at = stop + samples(rng.uniform(*GAP_S))
    return blocks


def inside(blocks: list[Block], n_times: int, margin_s: float = 0.0) -> np.ndarray:
    """Return a boolean array, shape (n_times,), true within the blocks and a margin around."""
    mask = np.zeros(n_times, bool)
    margin = samples(margin_s)
    for block in blocks:
        mask[max(block.start - margin, 0) : block.stop + margin] = True
    return mask


# --- forward model --------------------------------------------------------------------------------


@cache
def electrodes() -> tuple[dict[str, np.ndarray], np.ndarray]:
    """Return positions and the centre of the head's sphere, in metres.

    The positions are mne's ``easycap-M1``, which lie on a sphere of 95 mm, moved up so that the
    origin lies between the ears, as the CapTrak system of BIDS wants it (x right, y front, z up).
    Besides the channels and the reference there are ``NAS``, ``LPA`` and ``RPA``.
    """
    import mne

    found = mne.channels.make_standard_montage("easycap-M1").get_positions()
    centre = np.array([0.0, 0.0, -found["lpa"][2]])
    landmarks = {"NAS": found["nasion"], "LPA": found["lpa"], "RPA": found["rpa"]}
    wanted = {name: found["ch_pos"][name] for name in (*CHANNELS, REFERENCE)} | landmarks
    return {name: position + centre for name, position in wanted.items()}, centre


def direction(azimuth_deg: float, elevation_deg: float) -> np.ndarray:
    """Return the unit vector at an azimuth (0 front, 90 right) and an elevation."""
    azimuth, elevation = np.deg2rad([azimuth_deg, elevation_deg])
    return np.array(
        [
            np.sin(azimuth) * np.cos(elevation),
            np.cos(azimuth) * np.cos(elevation),
            np.sin(elevation),
        ]
    )


def lead_field(offsets_m: np.ndarray, moments: np.ndarray) -> np.ndarray:
    """Return what the channels see of unit dipoles.

    Parameters
    ----------
    offsets_m : ndarray, shape (n_dipoles, 3)
        Positions from the centre of the sphere, in metres.
    moments : ndarray, shape (n_dipoles, 3)
        Orientations; their length does not matter.

    Returns
    -------
    ndarray, shape (n_channels, n_dipoles)
        µV against the reference for a dipole of 1 nA·m.
    """
    import mne

    positions, centre = electrodes()
    names = (*CHANNELS, REFERENCE)
    info = mne.create_info(list(names), RATE_HZ, "eeg", verbose="error")
    montage = mne.channels.make_dig_montage(
        {name: positions[name] for name in names},
        *(positions[name] for name in ("NAS", "LPA", "RPA")),
        coord_frame="head",
    )
    info.set_montage(montage, verbose="error")
    n = len(offsets_m)
    unit = moments / np.linalg.norm(moments, axis=1, keepdims=True)
    dipole = mne.Dipole(np.arange(n), offsets_m + centre, np.full(n, 1e-9), unit, np.full(n, 100.0))
    sphere = mne.make_sphere_model(r0=centre, head_radius=0.095, verbose="error")
    forward, _ = mne.make_forward_dipole(dipole, sphere, info, verbose="error")
    volt_per_ampere_metre = forward["sol"]["data"].astype(float)
    return (volt_per_ampere_metre[:-1] - volt_per_ampere_metre[-1]) * 1e6 * 1e-9


def region_value(topography: np.ndarray) -> np.ndarray:
    """Return the mean over the occipital region of an average-referenced topography."""
    rows = [CHANNELS.index(name) for name in REGION]
    return topography[rows].mean(axis=0) - topography.mean(axis=0)


def paired_dipoles(
    azimuth_deg: float,
    elevation_deg: float,
    radius_m: float,
    tilt: tuple[float, float, float],
    rng: np.random.Generator,
) -> np.ndarray:
    """Return the lead field of a left and a right dipole, placed a little differently in each head.

    ``tilt`` is added to the outward direction of the right dipole, and mirrored for the left one.
    Shape (n_channels, 2), left first; each column scaled to 1 µV in the occipital region.
    """
    offsets, moments = [], []
    for side in (-1, 1):
        azimuth = side * (azimuth_deg + rng.normal(0, 3))
        outward = direction(azimuth, elevation_deg + rng.normal(0, 3))
        offsets.append(radius_m * outward)
        moments.append(outward + np.multiply(tilt, (side, 1, 1)) + rng.normal(0, 0.05, 3))
    columns = lead_field(np.array(offsets), np.array(moments))
    return columns / region_value(columns)


# --- time courses ---------------------------------------------------------------------------------


def coloured_noise(
    shape: tuple[int, ...],
    exponent: float,
    corner_hz: float,
    rng: np.random.Generator,
    band_hz: tuple[float, float] = (0.0, np.inf),
) -> np.ndarray:
    """Return noise of unit RMS whose power falls as 1/f^exponent above a corner, flat below it."""
    freqs_hz = np.fft.rfftfreq(shape[-1], 1 / RATE_HZ)
    weight = np.maximum(freqs_hz, corner_hz) ** (-exponent / 2)
    weight[(freqs_hz < band_hz[0]) | (freqs_hz > band_hz[1])] = 0
    weight[0] = 0
    noise = np.fft.irfft(np.fft.rfft(rng.standard_normal(shape)) * weight, shape[-1])
    return noise / np.sqrt((noise**2).mean(axis=-1, keepdims=True))


def narrow_band_rhythm(
    n_times: int, centre_hz: float, width_hz: float, rng: np.random.Generator
) -> np.ndarray:
    """Return a Gaussian random rhythm of unit RMS with a Gaussian spectrum of that width (FWHM)."""
    freqs_hz = np.fft.rfftfreq(n_times, 1 / RATE_HZ)
    deviation_hz = width_hz / np.sqrt(8 * np.log(2))
    # The amplitude is the root of the power, whose exponent is -1/2.
    weight = np.exp(-0.25 * ((freqs_hz - centre_hz) / deviation_hz) ** 2)
    rhythm = np.fft.irfft(np.fft.rfft(rng.standard_normal(n_times)) * weight, n_times)
    return rhythm / np.sqrt((rhythm**2).mean())


def smooth(steps: np.ndarray, width_s: float) -> np.ndarray:
    """Round off a step function with a Hann kernel of a given full width."""
    kernel = np.hanning(samples(width_s) + 2)
    padded = np.pad(steps, len(kernel) // 2, mode="edge")
    return np.convolve(padded, kernel / kernel.sum(), mode="same")[len(kernel) // 2 :][: len(steps)]


# --- brain ----------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Term:
    """A sinusoid of the response: ``left * f_left + right * f_right`` Hz.

    ``weights`` are those of the left and the right occipital dipole, ``watched`` the condition in
    which attention enhances the term ("" for none).
    """

    name: str
    left: int
    right: int
    weights: tuple[float, float]
    watched: str = ""


TERMS = (
    Term("left_h1", 1, 0, (0.45, 1.0), "watch_left"),
    Term("left_h2", 2, 0, (0.6, 1.0), "watch_left"),
    Term("right_h1", 0, 1, (1.0, 0.45), "watch_right"),
    Term("right_h2", 0, 2, (1.0, 0.6), "watch_right"),
    Term("sum", 1, 1, (1.0, 1.0)),
    Term("difference", -1, 1, (1.0, 1.0)),
)
SUM_SHARE = 0.2  # of the mean first harmonic
DIFFERENCE_SHARE = 0.12


def term_frequency_hz(term: Term, refresh_hz: float) -> float:
    """Return the frequency of a term on a display of a given refresh rate."""
    return refresh_hz * (term.left / FRAMES["left"] + term.right / FRAMES["right"])


def term_amplitude_uv(term: Term, traits: Traits) -> float:
    """Return a term's amplitude in the occipital region when attention does not enhance it."""
    if term.name in ("sum", "difference"):
        share = SUM_SHARE if term.name == "sum" else DIFFERENCE_SHARE
        return share * (traits.response_uv["left"] + traits.response_uv["right"]) / 2
    panel, harmonic = term.name.split("_")
    share = traits.second_harmonic_share if harmonic == "h2" else 1.0
    return share * traits.response_uv[panel]


def draw_topographies(traits: Traits, rng: np.random.Generator) -> dict[str, np.ndarray]:
    """Draw the complex topography of each term, shape (n_channels,), µV.

    The weaker hemisphere lags behind the stronger one, so that the phase differs between channels.
    The phase is that of a cosine at the onset of the trial.
    """
    columns = paired_dipoles(163, -2, 0.072, (0.2, 0.0, 0.2), rng)
    topographies = {}
    for term in TERMS:
        phase, lag = rng.uniform(-np.pi, np.pi), rng.uniform(0.2, 0.5)
        weights = np.array(term.weights, complex)
        weights[weights.real < 1] *= np.exp(-1j * lag)
        shape = columns @ weights
        shape *= np.exp(1j * phase) / abs(region_value(shape))
        topographies[term.name] = term_amplitude_uv(term, traits) * shape
    return topographies


def response(
    blocks: list[Block],
    n_times: int,
    refresh_hz: float,
    topographies: dict[str, np.ndarray],
    watched_factor: float,
) -> np.ndarray:
    """Return the response to the flicker, which starts anew at each trial's onset."""
    signal = np.zeros((len(CHANNELS), n_times))
    time_s = np.arange(samples(TRIAL_S)) / RATE_HZ
    for term in TERMS:
        turning = np.exp(2j * np.pi * term_frequency_hz(term, refresh_hz) * time_s)
        wave = (topographies[term.name][:, None] * turning).real
        for block in filter(lambda block: block.is_trial, blocks):
            gain = watched_factor if block.kind == term.watched else 1.0
            signal[:, block.start : block.stop] += gain * (1 + RESPONSE_PER_G * block.g) * wave
    return signal


def alpha_course(
    blocks: list[Block], n_times: int, traits: Traits, rng: np.random.Generator
) -> np.ndarray:
    """Return the alpha rhythm in the occipital region, shape (n_times,), µV.

    Its level changes in the half second around a block and is constant within.
    """
    level_uv = np.full(n_times, traits.alpha_rms_uv["open"])
    for block in blocks:
        around = inside([block], n_times, margin_s=0.25)
        if block.kind == "rest_closed":
            level_uv[around] = traits.alpha_rms_uv["closed"]
        elif block.is_trial:
            level_uv[around] = traits.alpha_rms_uv["watching"] * np.exp(-ALPHA_PER_G * block.g)
    rhythm = narrow_band_rhythm(n_times, traits.alpha_hz, ALPHA_WIDTH_HZ, rng)
    return smooth(level_uv, 0.5) * rhythm


def background(n_times: int, traits: Traits, rng: np.random.Generator) -> np.ndarray:
    """Return the 1/f activity of 48 dipoles scattered in the upper head, and 1 µV sensor noise."""
    n = 48
    offsets = np.array(
        [
            rng.uniform(0.05, 0.078)
            * direction(rng.uniform(-180, 180), np.rad2deg(np.arcsin(rng.uniform(-0.35, 1))))
            for _ in range(n)
        ]
    )
    columns = lead_field(offsets, rng.standard_normal((n, 3)))
    signal = columns @ coloured_noise((n, n_times), traits.background_exponent, 0.5, rng)
    centred = signal - signal.mean(axis=0)
    signal *= traits.background_rms_uv / np.sqrt((centred**2).mean())
    return signal + rng.standard_normal(signal.shape)


# --- artifacts ------------------------------------------------------------------------------------


def eye_topographies() -> tuple[np.ndarray, np.ndarray]:
    """Return what the channels see of a blink and of a gaze to the right.

    A blink is 1 µV on average at Fp1 and Fp2; a gaze is 1 µV between F8 and F7.
    """
    offsets = 0.083 * np.array([direction(azimuth, -22) for azimuth in (-30, 30)])
    blink = lead_field(offsets, np.tile([0.0, 0.7, 0.7], (2, 1))).sum(axis=1)
    right = lead_field(offsets, np.tile([1.0, 0.0, 0.0], (2, 1))).sum(axis=1)
    fp1, fp2, f7, f8 = (CHANNELS.index(name) for name in ("Fp1", "Fp2", "F7", "F8"))
    return blink / blink[[fp1, fp2]].mean(), right / (right[f8] - right[f7])


def blinks(
    blocks: list[Block], n_times: int, blink_uv: float, rng: np.random.Generator
) -> tuple[np.ndarray, list[float]]:
    """Return blinks as a time course, shape (n_times,), µV at Fp1/Fp2, and their peaks in seconds.

    None with the eyes closed, and half as many during trials as at other times.
    """
    closed = inside([b for b in blocks if b.kind == "rest_closed"], n_times, margin_s=1.0)
    trials = inside([b for b in blocks if b.is_trial], n_times)
    course, peaks_s = np.zeros(n_times), []
    at_s = rng.uniform(0.5, 2)
    while samples(at_s + 0.4) < n_times:
        rise, fall = samples(rng.uniform(0.07, 0.11)), samples(rng.uniform(0.16, 0.26))
        height_uv = blink_uv * rng.lognormal(0, 0.12)
        shape = np.concatenate([np.hanning(2 * rise)[:rise], np.hanning(2 * fall)[fall:]])
        at, keep = samples(at_s), rng.uniform() < 0.5
        if not closed[at] and (keep or not trials[at]):
            course[at - rise : at + fall] += height_uv * shape
            peaks_s.append(at / RATE_HZ)
        at_s += 1.0 + rng.exponential(2.5)
    return course, peaks_s


def gaze(blocks: list[Block], n_times: int, rng: np.random.Generator) -> np.ndarray:
    """Return the horizontal gaze as a time course, shape (n_times,), µV between F8 and F7.

    The eyes go to the watched panel a third of a second before the flicker starts, back to the
    middle after it, and make small saccades in between.
    """
    course, at = np.zeros(n_times), 0
    while at < n_times:
        stop = at + samples(rng.uniform(0.5, 2.0))
        course[at:stop] = rng.normal(0, 7)
        at = stop
    course[inside([b for b in blocks if b.kind == "rest_closed"], n_times)] = 0
    for block in filter(lambda block: block.is_trial, blocks):
        side = 1 if block.kind == "watch_right" else -1
        course[block.start - samples(0.35) : block.stop + samples(0.1)] += side * rng.normal(90, 6)
    return smooth(course, 0.05)


def muscle(
    n_times: int, rng: np.random.Generator
) -> tuple[np.ndarray, list[dict[str, float | str]]]:
    """Return bursts of the temporal muscles, 20 to 90 Hz, two a minute, and when they happen.

    A burst has 15 to 30 µV (RMS) at the temporal channel of its side.
    """
    signal, bursts = np.zeros((len(CHANNELS), n_times)), []
    n_bursts = round(2 * n_times / RATE_HZ / 60)
    for onset_s in np.sort(rng.uniform(1, n_times / RATE_HZ - 2, n_bursts)):
        side = str(rng.choice(["left", "right"]))
        n = samples(rng.uniform(0.3, 1.0))
        azimuths_deg = np.array([75, 90, 105]) * (-1 if side == "left" else 1)
        offsets = 0.083 * np.array([direction(azimuth, -8) for azimuth in azimuths_deg])
        columns = lead_field(offsets, offsets + 0.05 * rng.standard_normal((3, 3)))
        burst = columns @ coloured_noise((3, n), 0.3, 20, rng, (20, 90)) * np.hanning(n)
        temporal = burst[CHANNELS.index("T7" if side == "left" else "T8")]
        start = samples(onset_s)
        rms_uv = rng.uniform(15, 30)
        signal[:, start : start + n] += burst * rms_uv / np.sqrt((temporal**2).mean())
        bursts.append({"onset_s": start / RATE_HZ, "duration_s": n / RATE_HZ, "side": side})
    return signal, bursts


def movement(blocks: list[Block], n_times: int, rng: np.random.Generator) -> np.ndarray:
    """Return the artifact of moving electrodes: hundreds of µV, different at each of them.

    Half of it is common to all cables. A share of its own for each electrode is what no spatial
    filter can take out.
    """
    shape = (len(CHANNELS), n_times)
    own = coloured_noise(shape, 1.5, 1.0, rng)
    common = coloured_noise((1, n_times), 1.5, 1.0, rng)
    moving = inside([b for b in blocks if b.moving], n_times, margin_s=0.1).astype(float)
    return 300 * (own + common) / np.sqrt(2) * smooth(moving, 0.2)


def mains(n_times: int, mains_hz: float, rng: np.random.Generator) -> np.ndarray:
    """Return the hum of the mains: 1 to 5 µV, each channel with its own size and phase."""
    time_s = np.arange(n_times) / RATE_HZ
    size_uv = rng.uniform(1, 5, (len(CHANNELS), 1))
    phase = rng.uniform(-np.pi, np.pi, (len(CHANNELS), 1))
    return size_uv * np.cos(2 * np.pi * mains_hz * time_s + phase)


def spoil(channel: np.ndarray, kind: str, rng: np.random.Generator) -> np.ndarray:
    """Return a channel with a fault: flat, noisy, drifting or popping."""
    n_times = len(channel)
    if kind == "flat":
        return np.zeros(n_times)
    if kind == "noisy":
        return channel + 60 * rng.standard_normal(n_times)
    if kind == "drifting":
        return channel + 300 * coloured_noise((n_times,), 2.0, 0.1, rng)
    if kind == "popping":
        pops = np.zeros(n_times)
        at = rng.choice(n_times, n_times // samples(5), replace=False)
        pops[at] = rng.choice([-1, 1], len(at)) * rng.uniform(200, 500, len(at))
        decay = np.exp(-np.arange(samples(2)) / samples(0.3))
        return channel + np.convolve(pops, decay)[:n_times]
    raise ValueError(f"{kind!r} is no kind of bad channel")


# --- a recording ----------------------------------------------------------------------------------


@dataclass(frozen=True)
class Recording:
    """A simulated recording: ``signal_uv`` (n_channels, n_times), its blocks, and the truth."""

    signal_uv: np.ndarray
    blocks: list[Block]
    truth: dict


def condition_mean(term: Term, condition: str, blocks: list[Block], watched_factor: float) -> float:
    """Return the mean gain of a term over the marked trials of a condition."""
    g = [block.g for block in blocks if block.kind == condition and block.marked]
    gain = watched_factor if condition == term.watched else 1.0
    return gain * (1 + RESPONSE_PER_G * np.mean(g))


def describe_terms(
    person: Person, blocks: list[Block], topographies: dict[str, np.ndarray], traits: Traits
) -> dict:
    """Return the truth about the response: each term's frequency and topography by condition."""
    conditions = sorted({block.kind for block in blocks if block.is_trial and block.marked})
    described = {}
    for term in TERMS:
        by_condition = {}
        for condition in conditions:
            mean_uv = topographies[term.name] * condition_mean(
                term, condition, blocks, traits.watched_factor
            )
            by_condition[condition] = {
                "amplitude_uv": np.abs(mean_uv),
                "phase_rad": np.angle(mean_uv),
            }
        described[term.name] = {
            "frequency_hz": term_frequency_hz(term, person.refresh_hz),
            **by_condition,
        }
    return described


def describe_alpha(
    blocks: list[Block], course_uv: np.ndarray, topography: np.ndarray, traits: Traits
) -> dict:
    """Return the truth about alpha, with the power that this very rhythm has in each condition."""
    power_uv2 = {}
    for kind in sorted({block.kind for block in blocks if block.marked}):
        own = inside([b for b in blocks if b.kind == kind and b.marked], len(course_uv))
        power_uv2[kind] = np.mean(course_uv[own] ** 2)
    return {
        "frequency_hz": traits.alpha_hz,
        "width_hz": ALPHA_WIDTH_HZ,
        "region_power_uv2": power_uv2,
        "topography": topography,
    }


def add_artifacts(
    signal: np.ndarray, person: Person, blocks: list[Block], traits: Traits
) -> tuple[np.ndarray, dict]:
    """Return the brain's signals with everything that does not belong, and a record of it."""
    n_times = signal.shape[1]
    blink_topography, gaze_topography = eye_topographies()
    blink_course, peaks_s = blinks(blocks, n_times, traits.blink_uv, stream(person, "blinks"))
    bursts_signal, bursts = muscle(n_times, stream(person, "muscle"))

    signal = signal + np.outer(blink_topography, blink_course)
    signal += np.outer(gaze_topography, gaze(blocks, n_times, stream(person, "gaze")))
    signal += bursts_signal
    signal += movement(blocks, n_times, stream(person, "movement"))
    signal += mains(n_times, traits.mains_hz, stream(person, "mains"))
    faults_rng = stream(person, "faults")
    for name, kind in person.bad_channels.items():
        row = CHANNELS.index(name)
        signal[row] = spoil(signal[row], kind, faults_rng)
    return signal, {
        "bad_channels": [
            {"name": name, "kind": kind, "marked": name in person.marked_bad}
            for name, kind in person.bad_channels.items()
        ],
        "blink_peaks_s": peaks_s,
        "muscle_bursts": bursts,
        "movements": [
            {"onset_s": b.onset_s, "duration_s": b.duration_s} for b in blocks if b.moving
        ],
        "mains_hz": traits.mains_hz,
    }


def simulate(person: Person, n_trials: int, with_artifacts: bool = True) -> Recording:
    """Simulate one person's recording.

    Parameters
    ----------
    person : Person
        Who is recorded.
    n_trials : int
        Trials of 8 s; 20 in the committed dataset.
    with_artifacts : bool
        Whether eyes, muscles, movement, mains and bad channels are added to the brain's signals,
        which are the same either way. Lost markers and the display's true rate stay.

    Returns
    -------
    Recording
        The signal, the blocks and the truth.
    """
    traits = draw_traits(stream(person, "traits"))
    blocks = make_blocks(person, n_trials)
    n_times = blocks[-1].stop + samples(PAUSE_S)

    topographies = draw_topographies(traits, stream(person, "topographies"))
    alpha_rng = stream(person, "alpha")
    alpha_weights = alpha_rng.uniform(0.35, 0.65)
    alpha_columns = paired_dipoles(155, 18, 0.068, (0.0, 0.0, 0.0), alpha_rng)
    alpha_topography = alpha_columns @ [alpha_weights, 1 - alpha_weights]
    alpha_uv = alpha_course(blocks, n_times, traits, alpha_rng)

    signal = background(n_times, traits, stream(person, "background"))
    signal += np.outer(alpha_topography, alpha_uv)
    signal += response(blocks, n_times, person.refresh_hz, topographies, traits.watched_factor)
    truth = {
        "channels": CHANNELS,
        "reference": REFERENCE,
        "refresh_hz": person.refresh_hz,
        "watched_factor": traits.watched_factor,
        "response": describe_terms(person, blocks, topographies, traits),
        "alpha": describe_alpha(blocks, alpha_uv, alpha_topography, traits),
        "trials": [
            {"onset_s": b.onset_s, "condition": b.kind, "g": b.g, "marked": b.marked}
            for b in blocks
            if b.is_trial
        ],
    }
    if with_artifacts:
        signal, truth["artifacts"] = add_artifacts(signal, person, blocks, traits)
    return Recording(signal, blocks, truth)
