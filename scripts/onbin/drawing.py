"""How every figure looks, and how it is written."""

from collections.abc import Callable
from functools import wraps
from pathlib import Path
from typing import Any

INK, MUTED, PALE = "#1b2530", "#6b7480", "#dde2e6"
STYLE = {
    "font.size": 9,
    "axes.titlesize": 9.5,
    "axes.edgecolor": MUTED,
    "axes.spines.top": False,
    "axes.spines.right": False,
    **dict.fromkeys(("text.color", "axes.labelcolor", "xtick.color", "ytick.color"), INK),
    "legend.frameon": False,
    "text.parse_math": False,  # a $ in a name is a $
    "figure.constrained_layout.use": True,
}
RESOLUTION_DPI = 130
WIDTH_IN = 9.0


def styled(draw: Callable[..., Any]) -> Callable[..., Any]:
    """Draw without a display and in the style of all figures."""

    @wraps(draw)
    def drawn(*args: Any, **named: Any) -> Any:
        from matplotlib import rc_context

        with rc_context(STYLE | {"backend": "agg"}):
            return draw(*args, **named)

    return drawn


def new_figure(width_in: float, height_in: float) -> Any:
    """Empty figure."""
    from matplotlib.figure import Figure

    return Figure(figsize=(width_in, height_in))


@styled  # ticks take their style when they are first drawn
def save(figure: Any, path: str | Path, dpi: int = RESOLUTION_DPI) -> None:
    """Write a figure as PNG; the bytes depend on what it shows alone."""
    figure.savefig(path, dpi=dpi, metadata={"Software": None})
