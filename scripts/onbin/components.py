"""Independent components: fit, labels, how much of a tag each carries, verdicts, removal."""

import warnings
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from onbin.decisions import REMOVE
from onbin.filtering import apply_fir, decimate, design_highpass

REMOVED, KEPT = "removed", "kept"
# The classes of ICLabel in its order (Pion-Tonachini et al. 2019), in plain words.
CLASSES = ("brain", "muscle", "eye", "heart", "line noise", "channel noise", "other")
FIT_PARAMETERS = {
    "picard": {"ortho": False, "extended": True},
    "infomax": {"extended": True},
    "fastica": {},
}
# With fewer channels there are too few sources to tell apart (common practice).
FEWEST_CHANNELS = 8
# Lowest rate that the fit is brought down to, its high-pass, and the most samples it takes.
FIT_RATE_HZ, FIT_HIGHPASS_HZ, MOST_SAMPLES = 100.0, 1.0, 300_000
# Stretches for leaving gross artifacts out of the fit: length, and amplitude over the median one.
STRETCH_S, GROSS_FACTOR = 2.0, 5.0
SAMPLES_PER_WEIGHT = 20
# Variance, over the largest, below which a direction is but rounding (an earlier reference).
SMALLEST_EIGENVALUE = 1e-8
LABEL_SECONDS = 600.0
BLOCK_SAMPLES = 50_000
PASSING = ("eye",)  # classes whose artifacts come and go
# Where a passing artifact is: beyond so many robust sd and so long to each side, with soft edges;
# it is passing if so much of its power lies there.
ACTIVE_SD, ACTIVE_MARGIN_S, RAMP_S, PASSING_SHARE = 4.0, 0.25, 0.1, 0.5
# Segments that tags are looked for in, and their neighbouring bins on each side, past Hann leakage.
TAG_SEGMENT_S, TAG_NEIGHBOURS = 10.0, (3, 4, 5, 6, 7)


@dataclass(frozen=True)
class Fit:
    """Fitted components, or None and the reason in `notes`."""

    ica: "mne.preprocessing.ICA | None"  # noqa: F821
    n_samples: int
    notes: tuple[str, ...]


@dataclass(frozen=True)
class ComponentLimits:
    """Which components go.

    Attributes
    ----------
    remove : mapping of str to float
        Class, and the least probability with which it is removed.
    max_tag_share : float
        One that carries more of any tag's power is kept and flagged.
    correlation : float
        A component that correlates this much with an EOG or ECG channel is of eye or heart, where
        these classes are removed.
    """

    # Blinks and gaze are labelled above 0.9; below it, in short recordings with few channels,
    # components go that take up to a fifth of a response's SNR with them.
    remove: Mapping[str, float]
    max_tag_share: float
    correlation: float = 0.7


@dataclass(frozen=True)
class ComponentVerdict:
    """Verdict on one component, ``removed`` or ``kept``, and its evidence.

    `label` is its likeliest class and `probability` that class's; both are None where nothing
    could be labelled. `flagged` asks a person: it would go, but carries too much of a tag.
    """

    component: int
    verdict: str
    reason: str
    flagged: bool
    label: str | None
    probability: float | None
    variance_share: float
    largest_tag_share: float

    def row(self, peak_channel: str) -> dict[str, Any]:
        """Row of the table of verdicts."""
        return {
            "component": self.component,
            "peak_channel": peak_channel,
            "verdict": self.verdict,
            "reason": self.reason,
            "component_class": self.label,
            "probability": self.probability,
            "variance_share": self.variance_share,
            "tag_share": self.largest_tag_share,
            "flagged": self.flagged,
        }


def fit_components(raw, rank: int, method: str = "picard", seed: int = 0) -> Fit:
    """Fit an ICA to the EEG channels on a 1 Hz high-passed copy at a reduced rate.

    Parameters
    ----------
    raw : mne.io.Raw
        Filtered, interpolated and referenced recording.
    rank : int
        Independent channels: each interpolated one and a reference take one away.
    method : str
        ``picard`` (extended), ``infomax`` (extended) or ``fastica``.
    seed : int
        Of the first guess.

    Returns
    -------
    Fit

    Notes
    -----
    A high-pass of 1-2 Hz for the fit follows Winkler et al. 2015. Stretches with gross artifacts
    stay out; a long recording is thinned out evenly.
    """
    import mne

    picks = mne.pick_types(raw.info, eeg=True, exclude=[])
    if len(picks) < FEWEST_CHANNELS:
        reason = f"{len(picks)} EEG channels are too few to separate sources: no components"
        return Fit(None, 0, (reason,))
    step = max(int(raw.info["sfreq"] // FIT_RATE_HZ), 1)
    rate_hz = raw.info["sfreq"] / step
    slow_uv = decimate(
        lambda start, stop: raw.get_data(picks, start, stop) * 1e6,
        raw.n_times,
        raw.info["sfreq"],
        step,
    )
    taps = design_highpass(rate_hz, FIT_HIGHPASS_HZ).taps
    for channel, row in enumerate(slow_uv):
        slow_uv[channel] = apply_fir(row, taps)
    slow_uv, left_out_s = _without_gross_stretches(slow_uv, rate_hz)
    n_samples = slow_uv.shape[1]

    notes = []
    eigenvalues = np.linalg.eigvalsh(_covariance(slow_uv))
    found_rank = int(np.sum(eigenvalues > SMALLEST_EIGENVALUE * eigenvalues[-1]))
    if found_rank < rank:
        notes.append(f"{found_rank} independent channels where {rank} were expected")
        rank = found_rank
    if left_out_s:
        notes.append(f"{left_out_s:.0f} s with gross artifacts stayed out of the fit")
    if n_samples < SAMPLES_PER_WEIGHT * rank**2:
        notes.append(
            f"{n_samples} samples for {rank} components, {n_samples / rank**2:.1f} a weight: "
            f"below {SAMPLES_PER_WEIGHT}, the components are uncertain"
        )
    slow_uv *= 1e-6  # to volts, in place: a copy would be a good part of the memory
    copy = mne.io.RawArray(slow_uv, _info_at(raw.info, picks, rate_hz), verbose="error")
    ica = mne.preprocessing.ICA(
        n_components=rank,
        method=method,
        fit_params=FIT_PARAMETERS[method],
        random_state=seed,
        max_iter="auto",
        verbose="error",
    )
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        ica.fit(copy, picks="eeg", verbose="error")
    if any("converge" in str(warning.message) for warning in caught):
        notes.append(f"{method} had not converged after {ica.n_iter_} iterations")
    return Fit(ica, n_samples, tuple(notes))


def _info_at(info, picks: np.ndarray, rate_hz: float):
    import mne

    picked = mne.pick_info(info, picks)
    with picked._unlock():
        picked["sfreq"], picked["bads"] = rate_hz, []
        picked["lowpass"] = min(picked["lowpass"] or rate_hz / 2, rate_hz / 2)
    return picked


def _without_gross_stretches(data_uv: np.ndarray, rate_hz: float) -> tuple[np.ndarray, float]:
    """Whole stretches whose amplitude is not far above the median stretch's, thinned evenly."""
    n_stretch = round(STRETCH_S * rate_hz)
    n_whole = data_uv.shape[1] // n_stretch
    if n_whole < 2:
        return data_uv, 0.0
    stretches = data_uv[:, : n_whole * n_stretch].reshape(len(data_uv), n_whole, n_stretch)
    amplitude_uv = np.sqrt(np.einsum("cws,cws->w", stretches, stretches))
    kept = np.flatnonzero(amplitude_uv <= GROSS_FACTOR * np.median(amplitude_uv))
    left_out_s = (n_whole - kept.size) * STRETCH_S
    most = max(MOST_SAMPLES // n_stretch, 1)
    if kept.size > most:
        kept = kept[np.linspace(0, kept.size - 1, most).astype(int)]
    return stretches[:, kept].reshape(len(data_uv), -1), left_out_s


@dataclass(frozen=True)
class Separation:
    """Fitted components as matrices: all that later steps need of them.

    Attributes
    ----------
    maps : ndarray, shape (n_channels, n_components)
        The part of a component in the data is its map times its source.
    unmixing : ndarray, shape (n_components, n_channels)
        Sources are ``unmixing @ data``.
    channel : ndarray of str, shape (n_channels,)
    """

    maps: np.ndarray
    unmixing: np.ndarray
    channel: np.ndarray

    @classmethod
    def of(cls, ica) -> "Separation":
        """Read the matrices of a fitted ICA."""
        pca = ica.pca_components_[: ica.n_components_]
        maps = ica.pre_whitener_ * (pca.T @ ica.mixing_matrix_)
        unmixing = (ica.unmixing_matrix_ @ pca) / ica.pre_whitener_.T
        return cls(maps, unmixing, np.array(ica.ch_names))

    @classmethod
    def none(cls, channels: Sequence[str]) -> "Separation":
        """No components."""
        return cls(np.empty((len(channels), 0)), np.empty((0, len(channels))), np.array(channels))

    @property
    def peak_channels(self) -> list[str]:
        """Channel where each component's map is largest."""
        return self.channel[np.abs(self.maps).argmax(axis=0)].tolist() if self.maps.size else []

    @property
    def items(self) -> list[str]:
        """Components as decisions name them: number and peak channel, such as ``3 Fp1``."""
        return [f"{number} {peak}" for number, peak in enumerate(self.peak_channels)]

    def removal(self, removed: Sequence[int], gates: Sequence[float]) -> np.ndarray:
        """Matrix (n_channels, n_channels) that takes so much of components out of the channels."""
        removed = list(removed)
        taken = np.asarray(gates)[:, None] * self.unmixing[removed]
        return np.eye(len(self.maps)) - self.maps[:, removed] @ taken


@dataclass(frozen=True)
class Evidence:
    """What speaks for and against each component.

    Attributes
    ----------
    separation : Separation
    probabilities : ndarray, shape (n_components, 7)
        By ICLabel, in the order of `CLASSES`; NaN where it could not label.
    eye_correlation, heart_correlation : ndarray, shape (n_components,)
        Largest absolute correlation with an EOG and ECG channel; NaN without one.
    variance_share : ndarray, shape (n_components,)
    tag : ndarray of str, shape (n_tags,)
    tag_share : ndarray, shape (n_components, n_tags)
        From `tag_shares`.
    """

    separation: Separation
    probabilities: np.ndarray
    eye_correlation: np.ndarray
    heart_correlation: np.ndarray
    variance_share: np.ndarray
    tag: np.ndarray
    tag_share: np.ndarray

    @classmethod
    def none(cls, channels: Sequence[str]) -> "Evidence":
        """No components."""
        empty = np.empty(0)
        return cls(
            Separation.none(channels), np.empty((0, len(CLASSES))), empty, empty, empty,
            np.empty(0, dtype=str), np.empty((0, 0)),
        )  # fmt: skip

    def arrays(self) -> dict[str, np.ndarray]:
        """All of it by name."""
        own = {name: getattr(self, name) for name in self.__dataclass_fields__}
        separation = own.pop("separation")
        return own | {name: getattr(separation, name) for name in Separation.__dataclass_fields__}

    @classmethod
    def of(cls, stored: Mapping[str, np.ndarray]) -> "Evidence":
        """Take it from what `arrays` gave."""
        of_separation = Separation.__dataclass_fields__
        separation = Separation(**{name: stored[name] for name in of_separation})
        others = {name: array for name, array in stored.items() if name not in of_separation}
        return cls(separation=separation, **others)

    def rows(self) -> list[dict[str, Any]]:
        """Rows of the table of evidence."""
        return [
            {
                "component": number,
                "peak_channel": peak,
                "component_class": CLASSES[int(np.argmax(chances))] if known else None,
                "probability": chances.max() if known else None,
                **{
                    f"{label.replace(' ', '_')}_p": chance
                    for label, chance in zip(CLASSES, chances, strict=True)
                },
                "eye_correlation": self.eye_correlation[number],
                "heart_correlation": self.heart_correlation[number],
                "variance_share": self.variance_share[number],
                "tag_share": self.tag_share[number].max(initial=0.0),
                "tag_shares": "; ".join(
                    f"{name} {share:.3f}"
                    for name, share in zip(self.tag, self.tag_share[number], strict=True)
                ),
            }
            for number, (peak, chances, known) in enumerate(
                zip(
                    self.separation.peak_channels,
                    self.probabilities,
                    np.isfinite(self.probabilities).all(axis=1),
                    strict=True,
                )
            )
        ]

    def judge(
        self, limits: ComponentLimits, decided: Mapping[str, Mapping[str, str]]
    ) -> list[ComponentVerdict]:
        """Say which components go, see `judge_components`; `decided` goes by `Separation.items`."""
        correlations = {"eye": self.eye_correlation, "heart": self.heart_correlation}
        return judge_components(
            self.probabilities,
            self.tag_share,
            self.variance_share,
            limits,
            {label: values for label, values in correlations.items() if np.isfinite(values).all()},
            {
                number: decided[item]
                for number, item in enumerate(self.separation.items)
                if item in decided
            },
        )

    def spare(
        self,
        judged: Sequence[ComponentVerdict],
        harmed_tags: Sequence[str],
        decided: Mapping[str, Mapping[str, str]],
    ) -> list[ComponentVerdict] | None:
        """Keep and flag the component that takes most of a harmed tag with it.

        Parameters
        ----------
        judged : sequence of ComponentVerdict
        harmed_tags : sequence of str
            Tags, or pairs joined by +, whose response the removal changes too much, worst first.
        decided : mapping
            A person's decisions: what a person removes is not spared.

        Returns
        -------
        list of ComponentVerdict or None
            None where nothing is harmed, or nothing can be spared.
        """
        items = self.separation.items
        going = [
            v.component
            for v in judged
            if v.verdict == REMOVED and items[v.component] not in decided
        ]
        if not harmed_tags or not going:
            return None
        columns = [list(self.tag).index(name) for name in harmed_tags[0].split("+")]
        worst = max(going, key=lambda component: self.tag_share[component, columns].max())
        told = f"takes part of the response at {harmed_tags[0]} with it: a person decides"
        return [
            replace(v, verdict=KEPT, flagged=True, reason=f"{v.reason}, but {told}")
            if v.component == worst
            else v
            for v in judged
        ]


def words(row: Mapping[str, Any]) -> str:
    """What the table of evidence says of a component, in short."""
    label = "not labelled"
    if row["component_class"]:
        label = f"{row['component_class']} {row['probability']:.2f}"
    told = [label, f"{100 * row['variance_share']:.1f} % of variance"]
    if row["tag_share"] > 0:
        told.append(f"{100 * row['tag_share']:.0f} % of a tag")
    for kind in ("eye", "heart"):
        if np.isfinite(row[f"{kind}_correlation"]):
            told.append(f"{kind} r {row[f'{kind}_correlation']:.2f}")
    return ", ".join(told)


def activity(sources: np.ndarray, rate_hz: float, passing: Sequence[bool]) -> np.ndarray:
    """Where each artifact is: 0 where its source is quiet, 1 where it is active, smooth between.

    A blink lasts a third of a second. Taking its component out of the seconds between as well
    would take out whatever brain activity leaks into it, and the response with it; so a component
    is taken out only where it is active (the thought of Castellanos & Makarov 2006, J Neurosci
    Methods 158:300, from memory, who kept the small wavelet coefficients of artifact components).
    Active is beyond 4 robust standard deviations, and 0.25 s to each side. A component whose power
    is not mostly there is taken out everywhere, unless its artifact is passing by its nature.

    Parameters
    ----------
    sources : ndarray, shape (n_components, n_times)
    rate_hz : float
    passing : sequence of bool
        Whether the artifact is passing by its nature, as blinks are and muscle may not be.

    Returns
    -------
    ndarray, shape (n_components, n_times)
    """
    from scipy.ndimage import maximum_filter1d, uniform_filter1d

    gates = np.ones(sources.shape)
    margin = 2 * round(ACTIVE_MARGIN_S * rate_hz) + 1
    ramp = 2 * round(RAMP_S / 2 * rate_hz) + 1
    for gate, source, always in zip(gates, sources, passing, strict=True):
        deviation = np.abs(source - np.median(source))
        active = deviation > ACTIVE_SD * 1.4826 * np.median(deviation)
        near = maximum_filter1d(active, margin)
        if always or np.sum(source[near] ** 2) > PASSING_SHARE * np.sum(source**2):
            gate[:] = uniform_filter1d(maximum_filter1d(near, ramp).astype(float), ramp)
    return gates


def remove_components(
    data_uv: np.ndarray, separation: Separation, removed: Mapping[int, str], rate_hz: float
) -> tuple[np.ndarray, np.ndarray]:
    """Take components out of the channels where they are active.

    Parameters
    ----------
    data_uv : ndarray, shape (n_channels, n_times)
        The channels of the separation.
    separation : Separation
    removed : mapping of int to str
        Components and their classes.
    rate_hz : float

    Returns
    -------
    cleaned_uv : ndarray, shape (n_channels, n_times)
    gates : ndarray, shape (n_removed, n_times)
        From `activity`.
    """
    chosen = list(removed)
    sources = separation.unmixing[chosen] @ data_uv
    gates = activity(sources, rate_hz, [label in PASSING for label in removed.values()])
    sources *= gates
    cleaned_uv = data_uv.copy()
    for row, weights in zip(cleaned_uv, separation.maps[:, chosen], strict=True):
        row -= weights @ sources
    return cleaned_uv, gates


def label_components(raw, ica) -> tuple[np.ndarray, tuple[str, ...]]:
    """Class probabilities of each component by ICLabel.

    Parameters
    ----------
    raw : mne.io.Raw
        The recording at its own rate, not the reduced copy.
    ica : mne.preprocessing.ICA
        From `fit_components`.

    Returns
    -------
    probabilities : ndarray, shape (n_components, 7)
        In the order of `CLASSES`; NaN where channels have no positions.
    notes : tuple of str
        How the recording differs from what ICLabel was trained on (average reference, 1-100 Hz,
        at least 250 Hz sampling, extended infomax).
    """
    import mne
    from mne_icalabel.iclabel import iclabel_label_components

    picks = mne.pick_channels(raw.ch_names, ica.ch_names, ordered=True)
    locations_m = np.array([raw.info["chs"][pick]["loc"][:3] for pick in picks])
    if not (np.isfinite(locations_m).all() and locations_m.any(axis=1).all()):
        reason = "some channels have no position: components cannot be labelled"
        return np.full((ica.n_components_, len(CLASSES)), np.nan), (reason,)
    sfreq_hz = raw.info["sfreq"]
    n_used = min(raw.n_times, round(LABEL_SECONDS * sfreq_hz))
    start = (raw.n_times - n_used) // 2
    data_uv = raw.get_data(picks, start, start + n_used) * 1e6
    data_uv = apply_fir(data_uv, design_highpass(sfreq_hz, FIT_HIGHPASS_HZ).taps)

    notes = []
    if sfreq_hz < 250:
        notes.append(f"sampled at {sfreq_hz:g} Hz, ICLabel was trained at 250 Hz and above")
    if raw.info["lowpass"] < 100:
        notes.append(f"low-passed at {raw.info['lowpass']:g} Hz, ICLabel was trained up to 100 Hz")
    if np.abs(data_uv.mean(axis=0)).max() > 1e-3 * np.abs(data_uv).max():
        notes.append("not in average reference, as ICLabel's training was")
    if ica.method == "fastica":
        notes.append("fitted by FastICA, ICLabel was trained on extended infomax")
    copy = mne.io.RawArray(data_uv * 1e-6, _info_at(raw.info, picks, sfreq_hz), verbose="error")
    with warnings.catch_warnings(), mne.use_log_level("error"):
        warnings.simplefilter("ignore")  # the notes say the same
        probabilities = iclabel_label_components(copy, ica, inplace=False, backend="onnx")
    return np.asarray(probabilities, dtype=float), tuple(notes)


def artifact_correlations(raw, separation: Separation) -> dict[str, np.ndarray]:
    """Absolute correlation of each component with each EOG and ECG channel.

    Returns
    -------
    dict of str to ndarray, shape (n_components,)
        By class, ``eye`` and ``heart``: the largest over its channels; empty without any.
    """
    import mne

    step = max(int(raw.info["sfreq"] // FIT_RATE_HZ), 1)
    rate_hz = raw.info["sfreq"] / step
    taps = design_highpass(rate_hz, FIT_HIGHPASS_HZ).taps

    def slow(picks) -> np.ndarray:
        data_uv = decimate(
            lambda start, stop: raw.get_data(picks, start, stop) * 1e6,
            raw.n_times,
            raw.info["sfreq"],
            step,
        )
        return apply_fir(data_uv, taps)

    found = {}
    sources = None
    for label, kind in (("eye", {"eog": True}), ("heart", {"ecg": True})):
        picks = mne.pick_types(raw.info, exclude=[], **kind)
        if len(picks) == 0:
            continue
        if sources is None:
            picked = mne.pick_channels(raw.ch_names, list(separation.channel), ordered=True)
            sources = separation.unmixing @ slow(picked)
        channels = slow(picks)
        both = np.corrcoef(np.vstack([sources, channels]))[: len(sources), len(sources) :]
        found[label] = np.abs(both).max(axis=1)
    return found


def variance_shares(data_uv: np.ndarray, maps: np.ndarray, unmixing: np.ndarray) -> np.ndarray:
    """Back-projected variance of each component, as a share of their sum, (n_components,)."""
    sources_variance = np.einsum("ij,jk,ik->i", unmixing, _covariance(data_uv), unmixing)
    variance = sources_variance * (maps**2).sum(axis=0)
    return variance / variance.sum()


def _covariance(data_uv: np.ndarray) -> np.ndarray:
    """Covariance of channels in double precision, block by block: no copy of a long recording."""
    mean_uv = data_uv.mean(axis=1, dtype=float, keepdims=True)
    total = np.zeros((len(data_uv), len(data_uv)))
    for start in range(0, data_uv.shape[1], BLOCK_SAMPLES):
        block = data_uv[:, start : start + BLOCK_SAMPLES] - mean_uv
        total += block @ block.T
    return total / (data_uv.shape[1] - 1)


def tag_shares(
    data_uv: np.ndarray,
    maps: np.ndarray,
    unmixing: np.ndarray,
    sfreq_hz: float,
    harmonics_hz: Sequence[Sequence[float]],
) -> np.ndarray:
    """Share of each tag's power, over its harmonics, that runs through each component.

    A harmonic's power in a component is what stands above the neighbouring bins, on average over
    Hann-tapered segments of 10 s, times the component's summed squared map. What is not clearly
    above its noise (3 standard errors) counts as nothing, so that slow, large components do not
    seem to carry a tag; and the share is of the tag's power and the standard errors together, so
    that nothing seems to carry a tag that is hardly there.

    Parameters
    ----------
    data_uv : ndarray, shape (n_channels, n_times)
        Channels that the components were fitted to.
    maps, unmixing : ndarray
        Of a `Separation`.
    sfreq_hz : float
        Sampling rate.
    harmonics_hz : sequence of sequence of float
        Harmonics of each tag.

    Returns
    -------
    ndarray, shape (n_components, n_tags)
        Columns sum to nearly 1 for a clear tag, and to 0 where no component shows it.
    """
    n_segment = min(round(TAG_SEGMENT_S * sfreq_hz), data_uv.shape[1])
    n_segments = data_uv.shape[1] // n_segment
    bin_hz = sfreq_hz / n_segment
    taper = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(n_segment) / n_segment)
    tag_of = np.repeat(np.arange(len(harmonics_hz)), [len(h) for h in harmonics_hz])
    terms_hz = np.array([f for h in harmonics_hz for f in h], dtype=float)
    weight = (maps**2).sum(axis=0)
    carried, uncertain = np.zeros((2, maps.shape[1], len(harmonics_hz)))
    steps = np.array([0, *TAG_NEIGHBOURS, *(-step for step in TAG_NEIGHBOURS)])
    for term, term_hz in enumerate(terms_hz):
        bins_hz = term_hz + steps * bin_hz
        away = np.abs(bins_hz[1:, None] - np.delete(terms_hz, term)) > 2 * bin_hz
        bins_hz = bins_hz[np.concatenate([[True], away.all(axis=1) & (bins_hz[1:] > 0)])]
        angles = 2 * np.pi * np.outer(np.arange(n_segment), bins_hz) / sfreq_hz
        kernel = taper[:, None] * np.exp(-1j * angles)
        power = np.zeros((maps.shape[1], bins_hz.size))
        for index in range(n_segments):
            segment = data_uv[:, index * n_segment : (index + 1) * n_segment]
            power += np.abs(unmixing @ (segment @ kernel)) ** 2 / n_segments
        noise = power[:, 1:].mean(axis=1)
        error = noise / np.sqrt(n_segments)
        excess = power[:, 0] - noise
        carried[:, tag_of[term]] += np.where(excess > 3 * error, excess, 0.0) * weight
        uncertain[:, tag_of[term]] += error * weight
    return carried / (carried + uncertain).sum(axis=0)


def judge_components(
    probabilities: np.ndarray,
    shares: np.ndarray,
    variance: np.ndarray,
    limits: ComponentLimits,
    correlations: Mapping[str, np.ndarray] | None = None,
    decided: Mapping[int, Mapping[str, str]] | None = None,
) -> list[ComponentVerdict]:
    """Say which components go.

    Parameters
    ----------
    probabilities : ndarray, shape (n_components, 7)
        From `label_components`.
    shares : ndarray, shape (n_components, n_tags)
        From `tag_shares`.
    variance : ndarray, shape (n_components,)
        From `variance_shares`.
    limits : ComponentLimits
        What goes, and what protects.
    correlations : mapping of str to ndarray, optional
        From `artifact_correlations`.
    decided : mapping of int to mapping, optional
        A person's decisions by component: they go before all else; see `decisions.about`.
    """
    verdicts = []
    for component, chances in enumerate(probabilities):
        labelled = bool(np.isfinite(chances).all())
        likeliest = int(np.argmax(chances)) if labelled else None
        why = [
            f"{label} with probability {chances[CLASSES.index(label)]:.2f}"
            for label, least in limits.remove.items()
            if labelled and chances[CLASSES.index(label)] >= least
        ]
        why += [
            f"correlates {values[component]:.2f} with a channel of the {label}"
            for label, values in (correlations or {}).items()
            if label in limits.remove and values[component] >= limits.correlation
        ]
        largest = float(shares[component].max(initial=0.0))
        flagged = bool(why) and largest > limits.max_tag_share
        if flagged:
            reason = (
                f"{why[0]}, but carries {100 * largest:.0f} % of a tag's power: a person decides"
            )
        elif why:
            reason = "; ".join(why)
        else:
            reason = "no class to remove is likely enough" if labelled else "not labelled"
        goes = bool(why) and not flagged
        if decision := (decided or {}).get(component):
            goes = decision["verdict"] == REMOVE
            reason = f"{decision['told']}; {reason}"
            flagged = False
        verdicts.append(
            ComponentVerdict(
                component=component,
                verdict=REMOVED if goes else KEPT,
                reason=reason,
                flagged=flagged,
                label=CLASSES[likeliest] if labelled else None,
                probability=float(chances[likeliest]) if labelled else None,
                variance_share=float(variance[component]),
                largest_tag_share=largest,
            )
        )
    return verdicts
