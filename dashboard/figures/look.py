"""What all charts share.

Colours are names of the pages' own variables; the browser looks them up, so that light and dark are decided
in one place. Lines differ by dash and width too: a grey print keeps them apart.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

INK: Final = "--ink"
SOFT: Final = "--soft"
LINE: Final = "--line"
LIMIT: Final = "--limit"
SHADE: Final = "--shade"
CLEAR: Final = "rgba(0,0,0,0)"

Trace = dict[str, Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class Drawing:
    """A figure as plotly takes it, and the same in words for who cannot see it."""

    data: Sequence[Trace]
    layout: dict[str, Any]
    words: str


def axis(title: str, low: float, high: float, **more: Any) -> dict[str, Any]:
    return {
        "title": {"text": title, "standoff": 6, "font": {"size": 12}},
        "range": [low, high],
        "gridcolor": LINE,
        "zeroline": False,
        "linecolor": SOFT,
        "ticks": "outside",
        "ticklen": 3,
        "tickcolor": SOFT,
        "fixedrange": True,
        "automargin": True,
    } | more


def layout(x: dict[str, Any], y: dict[str, Any], **more: Any) -> dict[str, Any]:
    return {
        "xaxis": x,
        "yaxis": y,
        "margin": {"l": 48, "r": 12, "t": 10, "b": 36},
        "paper_bgcolor": CLEAR,
        "plot_bgcolor": CLEAR,
        "font": {"family": "system-ui, sans-serif", "size": 12, "color": INK},
        "showlegend": False,
        "hovermode": "closest",
        "dragmode": False,
    } | more


def line(
    y: NDArray[np.floating[Any]], *, name: str, dash: str = "solid", width: float = 1.5, colour: str = INK
) -> Trace:
    """A trace; the caller says where x comes from."""
    return {
        "type": "scatter",
        "mode": "lines",
        "name": name,
        "y": rounded(y),
        "line": {"color": colour, "width": width, "dash": dash, "simplify": False},  # peaks are corners
    }


def level(value: float, *, dash: str, colour: str = SOFT, width: float = 1.0) -> dict[str, Any]:
    """A horizontal line over the whole width."""
    return {
        "type": "line", "xref": "paper", "x0": 0, "x1": 1, "y0": value, "y1": value,
        "line": {"color": colour, "width": width, "dash": dash},
    }  # fmt: skip


def label(text: str, x: float, y: float, *, colour: str = SOFT, **more: Any) -> dict[str, Any]:
    """A word at the line itself, in place of a legend."""
    return {
        "text": text, "x": x, "y": y, "showarrow": False, "font": {"size": 11, "color": colour},
        "xanchor": "right", "yanchor": "bottom",
    } | more  # fmt: skip


def rounded(values: NDArray[np.floating[Any]], digits: int = 5) -> list[float | None]:
    """Five digits are more than a pixel can show, and a quarter of the bytes."""
    return [float(f"{v:.{digits}g}") if math.isfinite(v) else None for v in values.tolist()]


def ceiling(value: float) -> float:
    """The next round number: an axis that does not breathe with every tick's noise."""
    if not value > 0:
        return 1.0
    step = 10.0 ** math.floor(math.log10(value)) / 4
    return math.ceil(value / step) * step
