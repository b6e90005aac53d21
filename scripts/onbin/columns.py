"""The data dictionary: every column of every table, once, with unit, meaning, null and source."""

from dataclasses import dataclass
from typing import Literal


@dataclass(frozen=True)
class Column:
    """One column.

    Attributes
    ----------
    description : str
        What it holds, with its formula.
    unit : str
        Empty for words, counts and ratios.
    kind : {"number", "integer", "text", "boolean"}
    null : str
        How it is distributed, or what its mean is, where there is no response.
    source : str
        Publication.
    """

    description: str
    unit: str = ""
    kind: Literal["number", "integer", "text", "boolean"] = "number"
    null: str = ""
    source: str = ""


def _text(description: str) -> Column:
    return Column(description, kind="text")


def _count(description: str) -> Column:
    return Column(description, kind="integer")


VICTOR_MAST = "Victor & Mast 1991, Electroencephalogr Clin Neurophysiol 78:378"
MEIGEN_BACH = "Meigen & Bach 2000, Doc Ophthalmol 98:207"
CORCORAN = "Corcoran et al. 2018, Psychophysiology 55:e13064"
DONOGHUE = "Donoghue et al. 2020, Nat Neurosci 23:1655"
BAKDASH = "Bakdash & Marusich 2017, Front Psychol 8:456"
LIN = "Lin et al. 2006, IEEE Trans Biomed Eng 53:2610 (from memory)"
WOLPAW = "Wolpaw et al. 2000, IEEE Trans Rehabil Eng 8:164 (from memory)"

COLUMNS = {
    # who, what and where
    "participant": _text("Participant, with sub-."),
    "recording": _text("Recording: path below the dataset without _eeg and extension."),
    "condition": _text("Condition, as named in the settings."),
    "tag": _text("Tag, or tags joined by + for an intermodulation."),
    "term": _text("1f, 2f, ...: harmonics of the tag; f1+f2 and the like: intermodulations."),
    "frequency_hz": Column("Exact frequency of the term, to the precision printed.", "Hz"),
    "driven": Column("Whether every tag of the term flickers in the condition.", kind="boolean"),
    "site": _text("Channel, or region as named in the settings."),
    "site_kind": _text("channel, or region (the mean signal of its channels)."),
    "channels": _text("Channels of the region that the recording has."),
    "in_study": Column("Whether the participant's figures enter the study's.", kind="boolean"),
    # trials and windows
    "trial": _count("Number of the trial in the recording, from 1."),
    "window": _count("Number of the window in the recording, from 1."),
    "index_in_trial": _count("Number of the window in its trial, from 1."),
    "onset_s": Column("Onset of the trial from the start of the recording.", "s"),
    "duration_s": Column("Duration of the trial.", "s"),
    "start_sample": _count("First sample of the window, at the working rate."),
    "n_samples": _count("Samples of the window."),
    "offset_s": Column("Time from the trial's onset to the window's first sample.", "s"),
    "window_number": _count("Place of the window in the participant's session, from 1."),
    "windows": _count("Windows that the figure rests on."),
    "windows_placed": _count("Windows that the trials hold."),
    "windows_kept": _count("Windows that were kept."),
    # verdicts
    "verdict": _text(
        "good, bad, kept, removed or left out; of a decision leave out, keep, bad, good or remove."
    ),
    "reason": _text("Why; n/a where there is nothing to say."),
    # channels and components
    "name": _text("Channel."),
    "type": _text("Type of the channel, in the words of BIDS."),
    "units": _text("Unit of the channel's signal."),
    "status": _text("good or bad, as the dataset says."),
    "position": _text("Where the channel's position comes from: dataset, template or none."),
    "component": _count("Number of the independent component, from 0."),
    "peak_channel": _text("Channel where the component's map is largest."),
    "component_class": _text("Most probable class by ICLabel."),
    "probability": Column(
        "Probability of that class.", source="Pion-Tonachini et al. 2019, NeuroImage 198:181"
    ),
    **{
        f"{label}_p": Column(f"Probability of the class {label.replace('_', ' ')}.")
        for label in (
            "brain",
            "muscle",
            "eye",
            "heart",
            "line_noise",
            "channel_noise",
            "other",
        )
    },
    "eye_correlation": Column("Largest absolute correlation with an EOG channel."),
    "heart_correlation": Column("Largest absolute correlation with an ECG channel."),
    "variance_share": Column("Share of the signal's variance that runs through the component."),
    "tag_share": Column("Largest share of a tag's power that runs through it."),
    "tag_shares": _text("That share for each tag."),
    "flagged": Column(
        "Whether it would be removed but carries too much of a tag: a person decides.",
        kind="boolean",
    ),
    # figures of channels; limits stand in scripts/onbin/sensors.py
    "flat_uv": Column(
        "Of a channel its robust amplitude (interquartile range / 1.349); of a window the smallest "
        "peak-to-peak amplitude of any channel.",
        "µV",
    ),
    "saturated_share": Column("Share of samples that stand still at the channel's extreme."),
    "dropout_share": Column("Share of samples that stand still elsewhere, for 50 ms or longer."),
    "pops_per_min": Column("Lasting jumps a minute that hardly another channel shares.", "1/min"),
    "deviation_z": Column("Robust z over channels of the logarithm of the amplitude."),
    "deviation_ratio": Column("Amplitude over that of the median channel, or its inverse."),
    "noise_z": Column("Robust z over channels of log amplitude in 30-45 Hz."),
    "noise_ratio": Column("Amplitude in 30-45 Hz over that of the median channel."),
    "noise_whiteness": Column("Power density in 30-45 Hz over that in 1-30 Hz."),
    "uncorrelated_share": Column(
        "Share of windows of 1 s in which the channel is like no other channel."
    ),
    "unpredicted_share": Column(
        "Share of windows of 4 s in which it is unlike its prediction from other channels."
    ),
    # figures of windows
    "peak_to_peak_uv": Column("Largest peak-to-peak amplitude of any channel.", "µV"),
    "peak_to_peak_limit_uv": Column("Its limit: median + 10 robust sd, within the bounds.", "µV"),
    "gradient_uv_per_ms": Column("Steepest step between samples of any channel.", "µV/ms"),
    "gradient_limit_uv_per_ms": Column("Its limit.", "µV/ms"),
    "muscle_uv": Column("Largest root mean square above 30 Hz of any channel.", "µV"),
    "muscle_limit_uv": Column("Its limit.", "µV"),
    "noise_beside": Column(
        "Noise beside the first two harmonics of the tags at the region of the response, over that "
        "of the condition's median window; at most 8."
    ),
    # decisions
    "item": _text("Channel; or number and peak channel of a component, such as 3 Fp1."),
    "by": _text("Who decided."),
    "date": _text("When, such as 2026-03-31."),
    # filters
    "recorded_rate_hz": Column("Sampling rate of the recording.", "Hz"),
    "decimation_factor": _count("Recorded over working rate; 1 where nothing was decimated."),
    "recorded_s": Column("Length of the recording.", "s"),
    "filter_kind": _text("high-pass, low-pass, anti-alias, band-stop, or fit and subtraction."),
    "filter_rate_hz": Column("Sampling rate at which the filter runs.", "Hz"),
    "edge_low_hz": Column(
        "Where the pass band begins; of a stop band where the one below ends.", "Hz"
    ),
    "edge_high_hz": Column(
        "Where the pass band ends; of a stop band where the one above begins.", "Hz"
    ),
    "half_low_hz": Column("-6 dB point of the lower transition.", "Hz"),
    "half_high_hz": Column("-6 dB point of the upper transition.", "Hz"),
    "transition_hz": Column("Width of each transition, from pass band to stop band.", "Hz"),
    "filter_window": _text("Window of the sinc, or weight of the fit."),
    "n_taps": _count("Length of the kernel in samples, an odd number: zero phase."),
    "kernel_s": Column("Length of the kernel, or of a stretch of the fit.", "s"),
    "gain": Column(
        "Measured gain at the term, 1 leaves it as it is: of the filters; or of the whole cleaning "
        "(filters, interpolation, reference, components) over all channels."
    ),
    "region_gain": Column("That of the whole cleaning in the region of the response."),
    "region_t2circ_p": Column(
        "p of T²circ in the region of the response.", null="uniform", source=VICTOR_MAST
    ),
    "filter_gain": Column("Gain of decimation and filters alone."),
    "peak_gain": Column(
        "That of the whole cleaning at the channel where the term is largest, which site names."
    ),
    "topography_correlation": Column(
        "Correlation of the term's topography before and after the cleaning."
    ),
    # plan
    "working_rate_hz": Column("Sampling rate after intake.", "Hz"),
    "term_kind": _text(
        "harmonic; intermodulation; mains, a multiple of its frequency; alias, where a frequency "
        "above half the recording's sampling rate folds back to, or an image of a sampled sine."
    ),
    "frequency_exact": _text("Frequency in Hz as a ratio of whole numbers."),
    "frames_per_cycle": _count("Frames of the display in one cycle, where they are whole."),
    "planned_driven": Column("Whether its tags flicker together in any condition.", kind="boolean"),
    "measured": Column("Whether the study measures the term.", kind="boolean"),
    "window_s": Column("Length of the window in which the term is measured.", "s"),
    "cycles": Column("Cycles of the term in that window; a whole number lies on a bin."),
    "planned_neighbours": _count(
        "Neighbouring bins that can be used, the fewest over the conditions that drive the term."
    ),
    "neighbours_left_out": _text(
        "The other neighbouring bins, as bins from the term, after what lies there."
    ),
    "collides_with": _text("Terms closer than one bin of the window in which either is measured."),
    "crowds": _text("Measured terms among whose neighbouring bins the term falls."),
    "in_alpha": Column("Whether it lies where alpha is looked for or measured.", kind="boolean"),
    "half_in_alpha": Column("Whether half the frequency of the tag does.", kind="boolean"),
    "planned_gain": Column(
        "Gain at the term through decimation and filters: 1 leaves it as it is."
    ),
    # flicker
    "signal": _text("What the frequency was found in: a region, or the photodiode."),
    "set_hz": Column("Frequency that the settings give.", "Hz"),
    "flicker_verdict": _text(
        "as set; offset: the 99 % interval leaves out the frequency set; cannot tell: the power "
        "near it could well be noise."
    ),
    "found_hz": Column(
        "Frequency of the largest power near the one set: maximum likelihood for a sinusoid of "
        "unknown amplitude and phase in each stretch.",
        "Hz",
        source="Kay 1993 (from memory)",
    ),
    "found_low_hz": Column(
        "Lower end of its 99 % interval: by the Cramér-Rao bound, widened to what explains the "
        "signal about as well where the SNR is low.",
        "Hz",
    ),
    "found_high_hz": Column("Upper end of that interval.", "Hz"),
    "offset_hz": Column("found_hz less set_hz.", "Hz"),
    "offset_bins": Column("The offset in bins of the window."),
    "lost_db": Column(
        "What a coefficient at the frequency set loses in one window: 20·log10|sin(πd)/(πd)|, d "
        "the offset in bins.",
        "dB",
    ),
    "stretch_snr_db": Column("Power of the response over noise in a bin of one stretch.", "dB"),
    "presence_p": Column(
        "Chance of so much power near the tag without a response: the larger of two, by the noise "
        "beyond the searched range and by that close to the frequency found."
    ),
    "drift_hz_per_min": Column("Change of the frequency over the recording.", "Hz/min"),
    "drift_low_hz_per_min": Column("Lower end of its 99 % interval.", "Hz/min"),
    "drift_high_hz_per_min": Column("Upper end of that interval.", "Hz/min"),
    "phase_steps": _count("Sudden steps of the phase within stretches, as lost frames make them."),
    "phase_steps_at": _text("Where they are: time in the recording in s, and size in degrees."),
    "used_hz": Column("Frequency that the measures rest on.", "Hz"),
    "frequency_source": _text("as set, or measured: the frequency found was adopted."),
    "measured_tags": _text("Tags whose measured frequency was adopted in some recording."),
    "measured_in": _text("People whose response rests on a measured frequency that was adopted."),
    # response
    "harmonics": _text(
        "Harmonics that the sum or the references hold; those shared with another term are left "
        "out."
    ),
    "neighbours": _count("Neighbouring bins B that the noise rests on."),
    "amplitude_uv": Column(
        "Evoked (phase-locked) amplitude |X̄|, X̄ the mean of the windows' coefficients.",
        "µV",
        null="Rayleigh, mean sqrt(π/4 · noise)",
    ),
    "amplitude_low_uv": Column(
        "Lower end of the 95 % confidence interval of the evoked amplitude (Rice).", "µV"
    ),
    "amplitude_high_uv": Column("Upper end of that interval.", "µV"),
    "noise_uv2": Column("Mean of |X̄|² over the neighbouring bins.", "µV²", source=MEIGEN_BACH),
    "amplitude_corrected_uv": Column("sqrt(max(|X̄|² − noise, 0)).", "µV"),
    "amplitude_baseline_uv": Column(
        "|X̄| less the mean of |X̄| over the neighbouring bins.", "µV", null="mean 0"
    ),
    "amplitude_sum_uv": Column(
        "Sum of amplitude_baseline_uv over the harmonics named in harmonics.",
        "µV",
        null="mean 0",
        source="Retter, Rossion & Schiltz 2021, J Cogn Neurosci 33:2372",
    ),
    "total_power_uv2": Column("Mean of |X_k|² over windows.", "µV²"),
    "total_noise_uv2": Column("Mean of |X_k|² over windows and neighbouring bins.", "µV²"),
    "window_amplitude_uv": Column("Mean over windows of the single-window amplitude |X_k|.", "µV"),
    "projected_amplitude_uv": Column(
        "Amplitude of the window along the mean phase of the condition's other windows; in tables "
        "of measures the mean over windows.",
        "µV",
        null="mean 0",
    ),
    "snr": Column(
        "|X̄|² / noise as a power ratio; of total power where the flicker is not phase-locked.",
        null="F(2, 2B), mean B/(B − 1); for total power F(2K, 2KB)",
        source=MEIGEN_BACH,
    ),
    "snr_db": Column("10·log10(snr).", "dB"),
    "snr_p": Column(
        "p of the SNR by its F distribution.",
        null="uniform where noise is level over the neighbouring bins; larger (careful) where it "
        "falls steeply, as 1/f noise does below about 12 Hz",
    ),
    "amplitude_ratio": Column(
        "|X̄| over the mean amplitude of the neighbouring bins; a description, not a test."
    ),
    "t2circ": Column("T²circ against zero.", null="K·T²circ ~ F(2, 2K − 2)", source=VICTOR_MAST),
    "t2circ_p": Column("p of T²circ.", null="uniform", source=VICTOR_MAST),
    "hotelling_t2": Column(
        "Hotelling's T² against zero.", null="(K − 2)/(2(K − 1))·T² ~ F(2, K − 2)"
    ),
    "hotelling_p": Column("p of Hotelling's T².", null="uniform"),
    "condition_index": Column(
        "Ratio of the axes of the windows' scatter; 1 is circular.", source="Baker 2021"
    ),
    "condition_index_p": Column("p of circular scatter.", null="uniform", source="Baker 2021"),
    "detection_test": _text(
        "Test that detection rests on: t2circ, hotelling where scatter is not circular (5 %), "
        "total_snr where the flicker is not phase-locked."
    ),
    "detection_p": Column("p of that test.", null="uniform"),
    "detection_p_corrected": Column(
        "detection_p corrected over the channels of the term and condition; of a region the same "
        "as detection_p, since the region is the primary test."
    ),
    "present": Column("Whether the corrected p is at most the level set.", kind="boolean"),
    "disc_radius_uv": Column("Radius of the 95 % confidence disc of X̄.", "µV", source=VICTOR_MAST),
    "phase_rad": Column(
        "Phase of X̄ from the onset of the flicker; 0 is a cosine peak at onset.",
        "rad",
        null="uniform",
    ),
    "phase_half_width_rad": Column(
        "Half-width of the 95 % interval of the phase; π where no phase is excluded.", "rad"
    ),
    "latency_ms": Column(
        "Apparent latency: minus the slope of phase over the harmonics named, over 2π; known up to "
        "multiples of the tag's cycle. It takes the harmonics to be made alike.",
        "ms",
        source="Regan 1966, Electroencephalogr Clin Neurophysiol 20:238",
    ),
    "latency_low_ms": Column("Lower end of its 95 % interval.", "ms"),
    "latency_high_ms": Column("Upper end of that interval.", "ms"),
    "itpc": Column("Inter-trial phase coherence over windows.", null="E[ITPC²] = 1/K"),
    "ppc": Column("Pairwise phase consistency (K·ITPC² − 1)/(K − 1).", null="mean 0"),
    "rayleigh_z": Column("Rayleigh's z = K·ITPC².", source="Zar 2010, chapter 27"),
    "rayleigh_p": Column("p of Rayleigh's test (Zar's approximation).", null="uniform"),
    # alpha
    "alpha_frequency_hz": Column(
        "Individual alpha frequency: the peak; n/a where none was found.", "Hz", source=CORCORAN
    ),
    "alpha_centre_hz": Column("Centre of gravity of the alpha peak.", "Hz", source=CORCORAN),
    "alpha_found": _text("Whether an individual alpha frequency was found, and if not why."),
    "band_low_hz": Column("Lower edge of the individual alpha band.", "Hz"),
    "band_high_hz": Column("Upper edge of the individual alpha band.", "Hz"),
    "alpha_power_uv2": Column("Power in the individual band (the fixed one if none).", "µV²"),
    "alpha_power_db": Column("10·log10(alpha_power_uv2 / 1 µV²).", "dB"),
    "alpha_fixed_uv2": Column("Power in the fixed alpha band.", "µV²"),
    "alpha_periodic_uv2": Column(
        "Power in the individual band above the aperiodic fit.", "µV²", source=DONOGHUE
    ),
    "alpha_relative": Column("Power in the individual band as a share of that in 2-40 Hz."),
    "alpha_lateralisation": Column(
        "(R − L)/(R + L) of alpha power in the two regions set; n/a for other sites."
    ),
    "aperiodic_exponent": Column("Exponent of the aperiodic fit, 2-40 Hz.", source=DONOGHUE),
    "aperiodic_offset": Column("Offset of the aperiodic fit.", "log10(µV²/Hz)", source=DONOGHUE),
    "aperiodic_r2": Column("Variance of the log spectrum that the fit explains."),
    "subtracted_uv2": Column(
        "Power of the terms in 5-15 Hz that were subtracted before alpha was measured.", "µV²"
    ),
    # relation
    "log_alpha": Column("log10 of the window's alpha power in µV².", "log10(µV²)"),
    "rho": Column(
        "Spearman correlation over windows of log_alpha with projected_amplitude_uv, both less "
        "their condition's mean.",
        null="mean 0",
    ),
    "rho_partial": Column("The same with the window's number (time on task) held constant."),
    "rho_p": Column("p by permuting whole trials within conditions.", null="uniform"),
    "attended": Column("Whether the tag is the attended one.", kind="boolean"),
    "rho_mean": Column("Mean over people of rho, by Fisher's z."),
    "rho_low": Column("Lower end of its 95 % BCa bootstrap interval."),
    "rho_high": Column("Upper end of that interval."),
    "rm_r": Column("Repeated-measures correlation over all windows.", source=BAKDASH),
    "rm_p": Column("p of the repeated-measures correlation.", source=BAKDASH),
    # attention
    "attended_tags": _text("Attended tags that are told apart."),
    "conditions": _text("Conditions in which they are attended, with the same tags flickering."),
    "decision": _text("What one decision rests on: a window, or all windows of a trial."),
    "decision_s": Column("Length of signal that one decision rests on, on average.", "s"),
    "trials": _count("Trials that the figure rests on."),
    "accuracy": Column(
        "Share of right decisions, the mean over the attended tags. A linear discriminant of the "
        "canonical correlations with each tag's sine-cosine references, cross-validated by trial: "
        "filters and discriminant never see a trial that they decide on.",
        null="mean chance",
        source=LIN,
    ),
    "accuracy_low": Column(
        "Lower end of its 95 % interval. Trials count as the independent observations, for "
        "windows too, since windows of a trial are alike.",
        source="Wilson 1927, J Am Stat Assoc 22:209",
    ),
    "accuracy_high": Column("Upper end of that interval."),
    "chance": Column("Accuracy by guessing: one over the number of attended tags."),
    "accuracy_p": Column(
        "One-sided p of the accuracy, by permuting trials within the parts of the "
        "cross-validation.",
        null="uniform",
    ),
    "itr_bits_per_min": Column(
        "Information transfer rate at that length of signal, time between not counted; 0 where "
        "the accuracy is not above chance.",
        "bit/min",
        source=WOLPAW,
    ),
    # study
    "measure": _text("Column that is compared."),
    "comparison": _text("Comparison, as named in the settings."),
    "kind": _text(
        "Of a comparison: within people, between groups, or correlation with a covariate; of a "
        "decision: recording, channel or component."
    ),
    "plus": _text("What is compared."),
    "minus": _text("What it is compared with."),
    "n": _count("People in the comparison."),
    "who": _text("People in the comparison."),
    "estimate": Column("Mean difference, in the unit of the measure; or Spearman's rho."),
    "estimate_unit": _text("Unit of the estimate."),
    "estimate_low": Column("Lower end of its 95 % BCa bootstrap interval."),
    "estimate_high": Column("Upper end of that interval."),
    "effect_size": Column("d_z within people, Hedges' g between groups."),
    "p": Column("p by flipping signs, or by permuting people.", null="uniform"),
    "p_holm": Column("p after Holm's correction over the planned comparisons."),
    "recordings": _count("Recordings of the participant."),
    "left_out": _text("Recordings of the participant that are left out, and why."),
    "channels_bad": _count("Bad channels, the most in one recording."),
    "channels_total": _count("EEG channels, the fewest in one recording."),
    "components_removed": _count("Independent components removed, over recordings."),
    "fewest_windows": _count("Windows kept in the condition that kept fewest."),
    "fewest_condition": _text("That condition."),
    # manifest
    "file": _text("File, from the results folder."),
    "step": _text("Step that made it."),
    "bytes": _count("Size."),
    "sha256": _text("SHA-256 of its content."),
    "inputs": _text("Files that it was made from."),
}
