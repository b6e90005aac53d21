"""From tables of windows to rows: the relation of alpha and response at each tag."""

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from onbin import relation

ATTENDED = "attended tag"
UNATTENDED = "unattended tags"


def join(
    alpha: Sequence[Mapping[str, Any]],
    response: Sequence[Mapping[str, Any]],
    alpha_region: str,
    response_region: str,
    attended: Mapping[str, str | None],
) -> list[dict[str, Any]]:
    """Put each window's alpha beside its response at each driven tag.

    Parameters
    ----------
    alpha, response : sequence of mapping
        Rows of the tables of windows.
    alpha_region, response_region : str
    attended : mapping
        The attended tag of each condition, or None.
    """
    alpha_of = {
        row["window_number"]: row["log_alpha"] for row in alpha if row["site"] == alpha_region
    }
    return [
        row
        | {
            "log_alpha": alpha_of[row["window_number"]],
            "attended": (
                row["tag"] == attended[row["condition"]] if attended[row["condition"]] else None
            ),
        }
        for row in response
        if row["site"] == response_region
    ]


def relation_rows(
    windows: Sequence[Mapping[str, Any]], permutations: int, seed: int
) -> Iterator[dict[str, Any]]:
    """One row for each tag, and for the attended and unattended ones where there are such."""
    groups = {tag: [w for w in windows if w["tag"] == tag] for tag in _tags(windows)}
    groups[ATTENDED] = [w for w in windows if w["attended"] is True]
    groups[UNATTENDED] = [w for w in windows if w["attended"] is False]
    for tag, rows in groups.items():
        if not rows:
            continue
        found = relation.window_relation(
            [row["log_alpha"] for row in rows],
            [row["projected_amplitude_uv"] for row in rows],
            [f"{row['condition']} {row['tag']}" for row in rows],
            [f"{row['recording']} {row['trial']}" for row in rows],
            [row["window_number"] for row in rows],
            seed=seed,
            n_permutations=permutations,
        )
        yield {
            "tag": tag,
            "frequency_source": ", ".join(sorted({row["frequency_source"] for row in rows})),
            "windows": found.n_windows,
            "rho": found.rho,
            "rho_partial": found.partial_rho,
            "rho_p": found.p,
            "reason": found.reason or None,
        }


def _tags(windows: Sequence[Mapping[str, Any]]) -> list[str]:
    return list(dict.fromkeys(window["tag"] for window in windows))
