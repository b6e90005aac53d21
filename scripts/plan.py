"""The flicker plan: where every term of every tag lies, what that costs, and what to do."""

from collections import defaultdict
from contextlib import suppress
from pathlib import Path

from onbin import filtering, headers, layout, plan, plan_page, sidecars, tables, tagging
from onbin.errors import DataError, SettingsError
from onbin.plan import Recorded
from onbin.runner import run

COLUMNS = [
    "working_rate_hz", "recordings", "term_kind", "tag", "term", "frequency_hz", "frequency_exact",
    "frames_per_cycle", "planned_driven", "measured", "n_samples", "window_s", "cycles",
    "planned_neighbours", "neighbours_left_out", "collides_with", "crowds", "in_alpha",
    "half_in_alpha", "planned_gain",
]  # fmt: skip

LENGTH_M = (0.001, 1000)  # of displays; beyond it nothing is known


def plan_flicker(inputs, outputs, settings):
    """Plan from settings and metadata; only a recording without channels.tsv is opened."""
    chosen = settings["dataset"]
    found = layout.find_recordings(chosen["folder"], chosen["tasks"], chosen["participants"])
    recordings = [r for r in found if r.name in settings["recordings"]]
    recorded = [read_metadata(r.files) for r in recordings]
    require_common_rates(settings, recordings, recorded)
    refuse(plan.lacking_channels(settings, eeg_by_recording(recordings)))
    plans = {}
    for setup in plan.setups(settings, recorded):
        refuse(plan.blocking(settings, setup))
        gains = filter_gains(settings, setup)
        refuse(plan.changed_by_filters(settings, gains))
        plans[setup] = plan.planned_terms(settings, setup, gains)

    rows = (plan.term_row(settings, setup, p) for setup, terms in plans.items() for p in terms)
    tables.write_table(outputs.terms, rows, COLUMNS)
    Path(outputs.page).write_text(plan_page.page(settings, recorded, plans), encoding="utf-8")


def refuse(stops):
    """Stop with everything that cannot work, and what to do."""
    told = [f"  {'.'.join(map(str, s.where))}: {s.found}; {s.advice}." for s in stops]
    if told:
        raise SettingsError("the flicker plan cannot work.\n" + "\n".join(told))


def require_common_rates(settings, recordings, recorded):
    """See that the recordings of each participant would be brought to one rate."""
    least = plan.assumed_setup(settings).working_rate
    rates = defaultdict(dict)
    for recording, told in zip(recordings, recorded, strict=True):
        if told.rate_hz:
            rate = plan.working_rate(tagging.exact_rate(told.rate_hz), least)
            rates[recording.participant][recording.name] = rate
    for of_participant in rates.values():
        tagging.common_rate(of_participant)


def eeg_by_recording(recordings):
    """EEG channels of each recording, but for those with damaged files, of which intake tells."""
    names = {}
    for recording in recordings:
        with suppress(DataError):
            names[recording.stem] = sidecars.eeg_names(recording.files)
    return names


def filter_gains(settings, setup):
    """Gain at each measured term through decimation and the filters."""
    terms = plan.measured_terms(settings, setup)
    if not terms:
        return {}
    frequencies_hz = [float(term.frequency) for term in terms]
    chosen = settings["filter"]
    chain = filtering.FilterChain.design(
        float(setup.working_rate),
        chosen["highpass_hz"],
        plan.passband_hz(settings, setup),
        setup.line_hz,
        chosen["line_removal"],
    )
    gains = abs(chain.gains(frequencies_hz))
    for design in filtering.antialias(float(setup.recorded_rate or 0), setup.factor):
        gains = gains * design.gain(frequencies_hz)
    return dict(zip(terms, gains.tolist(), strict=True))


def read_metadata(files):
    """What the JSON files that apply to a recording tell; ``files`` are those of its layout."""
    told = sidecars.merged(files, "eeg.json")
    screen = sidecars.merged(files, "events.json").get("StimulusPresentation")
    screen = screen if isinstance(screen, dict) else {}
    size = screen.get("ScreenSize")
    size = size if isinstance(size, list) and len(size) == 2 else (None,)
    size_m = tuple(_within(LENGTH_M, length) for length in size)
    return Recorded(
        rate_hz=_within(headers.RATE_HZ, told.get("SamplingFrequency")),
        line_hz=_within(sidecars.MAINS_HZ, told.get("PowerLineFrequency")),
        refresh_hz=_within(plan.FREQUENCY_HZ, screen.get("ScreenRefreshRate")),
        distance_m=_within(LENGTH_M, screen.get("ScreenDistance")),
        size_m=size_m if all(size_m) else None,
    )


def _within(bounds, value):
    """Take a number within bounds; anything else, such as n/a, is not known."""
    is_number = isinstance(value, int | float) and not isinstance(value, bool)
    return float(value) if is_number and bounds[0] <= value <= bounds[1] else None


if "snakemake" in globals():
    run(plan_flicker, snakemake)  # noqa: F821
