"""Frequencies as exact fractions: tags, their terms, and windows of whole cycles.

Nothing here is rounded: a tag of 10 frames on a 144 Hz display is 72/5 Hz until it is projected.
"""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from fractions import Fraction
from math import ceil, gcd, lcm

from onbin.errors import DataError

USUAL_RATE_HZ = 250.0  # components are labelled by networks trained at this rate and above
USUAL_PASSBAND_HZ = 100.0  # holds the muscle band, by which components and windows are judged
ANTIALIAS_PASSBAND = 0.4  # end of what decimation lets pass, over the rate that it leaves
# How far each way of removing the mains reaches: no term may be nearer to it.
LINE_REACH_HZ = {"fit": Fraction(1, 2), "notch": Fraction(3, 2)}
RATE_DENOMINATOR = 1000  # sampling rates are ratios of small integers: 1000/3, 512, 2048, ...


@dataclass(frozen=True)
class Term:
    """A frequency at which tags may drive a response.

    Attributes
    ----------
    tag : str
        Name of the tag; for an intermodulation the names joined by ``+``.
    term : str
        ``1f``, ``2f``, ... for harmonics; ``2f1-f2`` and the like for intermodulations, with the
        tags counted in the order of the settings.
    orders : tuple of (str, int)
        How often each tag's frequency is taken.
    frequency : Fraction
        In Hz, exact.
    """

    tag: str
    term: str
    orders: tuple[tuple[str, int], ...]
    frequency: Fraction

    @property
    def harmonic(self) -> int | None:
        """Which harmonic of its tag this is; None for an intermodulation."""
        return self.orders[0][1] if len(self.orders) == 1 else None

    def driven_by(self, flickering: Iterable[str]) -> bool:
        """Tell whether every tag of this term flickers."""
        return {name for name, _ in self.orders} <= set(flickering)


def exact(value: object) -> Fraction:
    """Turn a number or a text such as ``"120/7"`` or ``"59.94"`` into a fraction, as written."""
    return Fraction(str(value))


def exact_rate(sampling_rate_hz: float) -> Fraction:
    """Recover the ratio of small integers that a stored sampling rate stands for.

    Examples
    --------
    >>> exact_rate(1000 / 3)
    Fraction(1000, 3)
    """
    return Fraction(sampling_rate_hz).limit_denominator(RATE_DENOMINATOR)


def common_rate(rates: Mapping[str, Fraction]) -> Fraction:
    """Working rate in Hz that a participant's recordings share.

    Parameters
    ----------
    rates : mapping
        Of each recording, by its name.

    Raises
    ------
    DataError
        If they differ.
    """
    if len(set(rates.values())) > 1:
        listed = ", ".join(f"{name}: {float(rate):g} Hz" for name, rate in rates.items())
        raise DataError(
            f"the recordings have different working rates ({listed}). Set intake.working_rate_hz "
            "to a rate that all can be decimated to, or leave recordings out."
        )
    return next(iter(rates.values()))


def decimation_factor(rate: Fraction, least: Fraction) -> int:
    """Largest whole factor that leaves at least a rate; 1 where the rate is lower already."""
    return max(1, int(rate / least))


def tag_frequency(
    refresh_hz: object = None, frames_per_cycle: int | None = None, frequency_hz: object = None
) -> Fraction:
    """Exact frequency of a tag, from the display or as given.

    Examples
    --------
    >>> tag_frequency(refresh_hz=120, frames_per_cycle=7)
    Fraction(120, 7)
    """
    if frames_per_cycle is not None:
        return exact(refresh_hz) / frames_per_cycle
    return exact(frequency_hz)


def harmonics(tags: Mapping[str, Fraction], count: int) -> list[Term]:
    """List the first ``count`` harmonics of each tag."""
    return [
        Term(name, f"{h}f", ((name, h),), h * frequency)
        for name, frequency in tags.items()
        for h in range(1, count + 1)
    ]


def intermodulations(tags: Mapping[str, Fraction], order: int) -> list[Term]:
    """List a·f1 + b·f2 > 0 with a, b ≠ 0 and |a| + |b| ≤ order, for each pair of tags."""
    names = list(tags)
    terms = []
    for i, first in enumerate(names):
        for j, second in enumerate(names[i + 1 :], start=i + 1):
            for a in range(-order + 1, order):
                for b in range(-order + 1, order):
                    frequency = a * tags[first] + b * tags[second]
                    if a and b and abs(a) + abs(b) <= order and frequency > 0:
                        orders = ((first, a), (second, b))
                        label = _sum_label((a, f"f{i + 1}"), (b, f"f{j + 1}"))
                        terms.append(Term(f"{first}+{second}", label, orders, frequency))
    return sorted(terms, key=lambda t: (t.tag, sum(abs(n) for _, n in t.orders), t.frequency))


def _sum_label(*parts: tuple[int, str]) -> str:
    """Write a sum of multiples with the positive ones first, such as ``2f1-f2``."""
    ordered = sorted(parts, key=lambda part: part[0] < 0)
    signed = [f"{'-' if n < 0 else '+'}{abs(n) if abs(n) > 1 else ''}{name}" for n, name in ordered]
    return "".join(signed).removeprefix("+")


def study_terms(settings: Mapping, below_hz: float) -> list[Term]:
    """All terms of a study below a frequency.

    Parameters
    ----------
    settings : mapping
        ``tags`` (pairs of name and frequency, as ratio), ``harmonics``, ``intermodulation_order``.
    below_hz : float
        What the filters let pass, see `passband_end`.
    """
    tags = study_tags(settings)
    terms = harmonics(tags, settings["harmonics"])
    terms += intermodulations(tags, settings["intermodulation_order"])
    return [term for term in terms if term.frequency < below_hz]


def retuned(terms: Iterable[Term], tags: Mapping[str, Fraction]) -> list[Term]:
    """Give terms the frequencies that follow from other frequencies of their tags."""
    return [
        replace(term, frequency=sum(n * tags[name] for name, n in term.orders)) for term in terms
    ]


def study_tags(settings: Mapping) -> dict[str, Fraction]:
    """Exact frequencies of the tags, from the plain settings of a rule."""
    return {name: Fraction(ratio) for name, ratio in settings["tags"]}


def passband_end(lowpass_hz: float | None, rate_hz: float, terms: Mapping) -> float:
    """Edge of the low-pass in Hz.

    As set, else 100 or above the highest term where that is higher, at most 0.45 of the rate.
    """
    return lowpass_hz or min(_wanted_hz(terms), 0.45 * rate_hz)


def least_rate(working_rate_hz: float | None, lowpass_hz: float | None, terms: Mapping) -> float:
    """Least working rate in Hz: as set, else so high that the pass band ends at 0.4 of it."""
    return working_rate_hz or max(
        USUAL_RATE_HZ, (lowpass_hz or _wanted_hz(terms)) / ANTIALIAS_PASSBAND
    )


def other_removal(line_removal: str, apart_hz: Fraction | float) -> str:
    """Way of removing the mains that spares a term so near to it, where one way does not."""
    return "fit" if line_removal == "notch" and apart_hz > LINE_REACH_HZ["fit"] else "none"


def _wanted_hz(terms: Mapping) -> float:
    """End of a pass band that holds every term that is asked for."""
    fastest = max(study_tags(terms).values(), default=Fraction(0))
    most = max(terms["harmonics"], terms["intermodulation_order"])
    return max(USUAL_PASSBAND_HZ, float(ceil(fastest * most) + 1))


def whole_cycle_samples(frequencies: Iterable[Fraction], rate: Fraction) -> int:
    """Fewest samples that hold a whole number of cycles of every frequency.

    Examples
    --------
    >>> whole_cycle_samples([Fraction(12)], Fraction(512))
    128
    """
    return lcm(*((frequency / rate).denominator for frequency in frequencies))


def window_samples(
    tags: Mapping[str, Fraction], terms: Iterable[Term], rate: Fraction, length_s: float
) -> dict[Term, int]:
    """Samples of the window in which each term is measured: whole cycles, at most ``length_s``.

    One length serves all tags where such a length exists; else each tag has its own. Where not
    even one tag has whole cycles in whole samples, its window is the nearest sample to whole
    cycles; the projection is at the exact frequency all the same.

    Parameters
    ----------
    tags : mapping of str to Fraction
        Tag frequencies in Hz.
    terms : iterable of Term
    rate : Fraction
        Sampling rate in Hz.
    length_s : float
        Longest allowed window.

    Returns
    -------
    dict of Term to int
    """
    longest = int(exact(length_s) * rate)
    common = whole_cycle_samples(tags.values(), rate)
    if common <= longest:
        return dict.fromkeys(terms, longest // common * common)
    return {term: _own_samples(_fundamental(tags, term), rate, longest) for term in terms}


def _fundamental(tags: Mapping[str, Fraction], term: Term) -> Fraction:
    """Frequency of which all of a term's tags are multiples: whole cycles of it suit them all."""
    frequencies = [tags[name] for name, _ in term.orders]
    numerators = [f.numerator for f in frequencies]
    return Fraction(gcd(*numerators), lcm(*(f.denominator for f in frequencies)))


def _own_samples(frequency: Fraction, rate: Fraction, longest: int) -> int:
    fewest = whole_cycle_samples([frequency], rate)
    if fewest <= longest:
        return longest // fewest * fewest
    cycles = int(longest * frequency / rate)
    return min(round(cycles * rate / frequency), longest) if cycles else longest


def neighbour_offsets(count: int, skip: int) -> list[int]:
    """Offsets, in bins, of the neighbouring bins: ``count`` each side beyond ``skip``.

    Examples
    --------
    >>> neighbour_offsets(2, 1)
    [-3, -2, 2, 3]
    """
    upper = list(range(skip + 1, skip + count + 1))
    return [-j for j in reversed(upper)] + upper


def usable_neighbours(
    frequency: Fraction,
    offsets: Iterable[int],
    duration_s: Fraction,
    occupied: Iterable[Fraction],
    below_hz: float,
) -> list[bool]:
    """Tell which neighbouring bins hold noise only, and noise that the filters left as it was.

    A bin is left out when an occupied frequency is closer to it than one bin, when it lies within
    a bin of zero frequency, or beyond what the filters pass; and with it its mirror image on the
    other side, since on a falling spectrum one side alone would mistake the slope for noise.

    Parameters
    ----------
    frequency : Fraction
        The term, in Hz.
    offsets : iterable of int
        In bins.
    duration_s : Fraction
        Length of the window, whose inverse is the width of a bin.
    occupied : iterable of Fraction
        Frequencies in Hz of the other terms that are driven, and of the mains.
    below_hz : float
        End of the pass band.
    """
    offsets, others = list(offsets), [f for f in occupied if f != frequency]
    bins = [frequency + Fraction(j) / duration_s for j in offsets]
    free = {
        j
        for j, b in zip(offsets, bins, strict=True)
        if 1 / duration_s < b <= below_hz
        and all(abs(b - other) * duration_s >= 1 for other in others)
    }
    return [j in free and -j in free for j in offsets]
