"""Load at the crosshead pin over one turn of the crank, with its limits and the reversal shaded."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from dashboard.figures.look import (
    INK,
    LIMIT,
    SHADE,
    SOFT,
    Drawing,
    axis,
    ceiling,
    label,
    layout,
    level,
    line,
    rounded,
)

KILO: Final = 1000.0


@dataclass(frozen=True, slots=True, kw_only=True)
class PinLoadCurves:
    """Forces in N over crank angle in degrees, tension positive; limits None where none was entered."""

    crank_angle_deg: NDArray[np.float64]
    pin_load_n: NDArray[np.float64]
    gas_load_n: NDArray[np.float64]
    inertia_load_n: NDArray[np.float64]
    tension_limit_n: float | None
    compression_limit_n: float | None
    reversal_deg: Sequence[tuple[float, float]]  # intervals of the rarer sign; one may end past 360


def pin_load_figure(curves: PinLoadCurves) -> Drawing:
    loads = {
        "load at the pin": (curves.pin_load_n, "solid", 2.5, INK),
        "gas load": (curves.gas_load_n, "dash", 1.2, SOFT),
        "inertia load": (curves.inertia_load_n, "dot", 1.2, SOFT),
    }
    angles = rounded(curves.crank_angle_deg)
    data = []
    for name, (force, dash, width, colour) in loads.items():
        trace = line(force / KILO, name=name, dash=dash, width=width, colour=colour)
        hover = f"{name} %{{y:.1f}} kN at %{{x:.0f}}°<extra></extra>"
        data.append(trace | {"x": angles, "hovertemplate": hover})
    reach = _reach(curves)
    limits = _limits(curves)
    return Drawing(
        data=data,
        layout=layout(
            axis("crank angle from head-end dead centre, °", 0, 360, dtick=45),
            axis("kN, tension +", -reach, reach),
            shapes=[
                *_arcs(curves.reversal_deg),
                level(0.0, dash="solid"),
                *(level(kn, dash="longdash", colour=LIMIT, width=2) for kn, _ in limits),
            ],
            annotations=[*(_limit_label(kn, text) for kn, text in limits), *_line_labels(curves)],
        ),
        words=_words(curves),
    )


def _reach(curves: PinLoadCurves) -> float:
    peaks = [
        float(np.nanmax(np.abs(f))) for f in (curves.pin_load_n, curves.gas_load_n, curves.inertia_load_n)
    ]
    limits = [v for v in (curves.tension_limit_n, curves.compression_limit_n) if v is not None]
    return ceiling(1.12 * max(*peaks, *limits, 1.0) / KILO)


def _limits(curves: PinLoadCurves) -> list[tuple[float, str]]:
    found = []
    if curves.tension_limit_n is not None:
        found.append((curves.tension_limit_n / KILO, "limit, tension"))
    if curves.compression_limit_n is not None:
        found.append((-curves.compression_limit_n / KILO, "limit, compression"))
    return found


def _limit_label(kn: float, text: str) -> dict[str, Any]:
    return label(f"{text} {abs(kn):.0f} kN", 358, kn, colour=LIMIT, yanchor="bottom" if kn > 0 else "top")


def _line_labels(curves: PinLoadCurves) -> list[dict[str, Any]]:
    """The pin's at its own peak; each other one where its line is furthest from the rest."""
    forces = {"pin": curves.pin_load_n, "gas": curves.gas_load_n, "inertia": curves.inertia_load_n}
    angle, reach = curves.crank_angle_deg, _reach(curves)
    room = (angle > 20) & (angle < 330)
    labels: list[dict[str, Any]] = []
    taken: list[float] = []
    for name, force in forces.items():
        others = [f for other, f in forces.items() if other != name]
        gap = np.abs(force) if name == "pin" else np.min([np.abs(force - f) for f in others], axis=0)
        free = room & np.all([np.abs(angle - t) > 25 for t in taken], axis=0) if taken else room
        at = int(np.argmax(np.where(free, gap, -1.0)))
        taken.append(float(angle[at]))
        kn = float(force[at]) / KILO
        above = kn > 0 if abs(kn) > 0.05 * reach else kn >= 0
        labels.append(
            label(name, float(angle[at]), kn, colour=INK if name == "pin" else SOFT, xanchor="center",
                  yanchor="bottom" if above else "top", yshift=2 if above else -2)
        )  # fmt: skip
    return labels


def _arcs(intervals: Sequence[tuple[float, float]]) -> list[dict[str, Any]]:
    """Shaded from dead centre to dead centre; an arc that passes 360 degrees goes on at the left."""
    pieces: list[tuple[float, float]] = []
    for start, end in intervals:
        if end > 360:
            pieces += [(start, 360.0), (0.0, end - 360)]
        else:
            pieces.append((start, end))
    return [
        {
            "type": "rect", "xref": "x", "yref": "paper", "x0": round(a, 2), "x1": round(b, 2),
            "y0": 0, "y1": 1,
            "fillcolor": SHADE, "line": {"width": 0}, "layer": "below", "name": "reversal",
        }
        for a, b in pieces
        if b > a
    ]  # fmt: skip


def _words(curves: PinLoadCurves) -> str:
    high, low = int(np.nanargmax(curves.pin_load_n)), int(np.nanargmin(curves.pin_load_n))
    reversal = ", ".join(f"{a:.0f}° to {b:.0f}°" for a, b in curves.reversal_deg)
    return (
        f"Load at the pin from {-curves.pin_load_n[low] / KILO:.1f} kN compression at "
        f"{curves.crank_angle_deg[low]:.0f}° to {curves.pin_load_n[high] / KILO:.1f} kN tension at "
        f"{curves.crank_angle_deg[high]:.0f}°. "
        + (f"Shaded: the load is reversed from {reversal}." if reversal else "The load does not reverse.")
    )
