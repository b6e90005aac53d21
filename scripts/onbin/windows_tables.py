"""From verdicts on windows to rows, and how long the windows of each condition are."""

from collections.abc import Iterator, Mapping, Sequence
from fractions import Fraction
from typing import Any

from onbin.tagging import Term
from onbin.windows import LEFT_OUT, Unplaced, WindowVerdict


def samples_by_condition(
    flickering: Mapping[str, Sequence[str]],
    term_samples: Mapping[Term, int],
    rate: Fraction,
    length_s: float,
    rest_length_s: float,
) -> dict[str, int]:
    """Samples of a window in each condition.

    A window of a flicker condition is as long as the longest that a term needs; where nothing
    flickers it has the length set for rest, but never less, so that every term can be measured
    there too.

    Parameters
    ----------
    flickering : mapping
        Tags that flicker, by condition.
    term_samples : mapping of Term to int
        From `tagging.window_samples`.
    rate : Fraction
        Sampling rate in Hz.
    length_s, rest_length_s : float
        As set.
    """
    longest = max(term_samples.values(), default=int(length_s * rate))
    rest = max(int(rest_length_s * rate), longest)
    return {name: longest if tags else rest for name, tags in flickering.items()}


def verdict_rows(
    verdicts: Sequence[WindowVerdict], unplaced: Sequence[Unplaced], trials: Sequence[Mapping]
) -> Iterator[dict[str, Any]]:
    """Rows of the table of windows, those without samples last."""
    for number, verdict in enumerate(verdicts, start=1):
        window = verdict.window
        yield {
            "window": number,
            "trial": trials[window.trial]["trial"],
            "condition": window.condition,
            "index_in_trial": window.index_in_trial + 1,
            "start_sample": window.start_sample,
            "n_samples": window.n_samples,
            "offset_s": window.offset_s,
            "verdict": verdict.verdict,
            "reason": ", ".join(verdict.reasons) or None,
            **verdict.figures,
            **{f"{name.removesuffix('_uv')}_limit_uv": v for name, v in verdict.limits.items()},
        }
    for number, missing in enumerate(unplaced, start=len(verdicts) + 1):
        index = missing.index_in_trial
        yield {
            "window": number,
            "trial": trials[missing.trial]["trial"],
            "condition": missing.condition,
            "index_in_trial": None if index is None else index + 1,
            "verdict": LEFT_OUT,
            "reason": missing.reason,
        }
