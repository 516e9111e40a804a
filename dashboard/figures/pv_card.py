"""Pressure over volume of one cylinder end, by estimate, between its measured line pressures."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from dashboard.figures.look import Drawing, axis, ceiling, label, layout, level, line
from model.units import conversion


@dataclass(frozen=True, slots=True, kw_only=True)
class EndCurve:
    """One end over one turn, in SI and absolute."""

    side: str
    held_open: bool
    volume_m3: NDArray[np.float64]
    pressure_pa: NDArray[np.float64]
    suction_pressure_pa: float
    discharge_pressure_pa: float


def pv_figure(end: EndCurve, *, highest_volume_m3: float, barometer_pa: float) -> Drawing:
    """Both ends of a cylinder share the volume axis, so that their cards can be compared."""
    barg = conversion("barg", "pressure", barometer_pa=barometer_pa)
    pressure = barg.from_si(end.pressure_pa)
    suction, discharge = barg.from_si(end.suction_pressure_pa), barg.from_si(end.discharge_pressure_pa)
    litres = end.volume_m3 * 1000
    wide = ceiling(1.02 * highest_volume_m3 * 1000)
    high = ceiling(1.1 * max(float(np.nanmax(pressure)), discharge))
    low = min(0.0, float(np.nanmin(pressure)))
    trace = line(pressure, name=f"{end.side} end", width=2.0)
    trace["x"] = [float(f"{v:.5g}") for v in litres.tolist()]
    trace["hovertemplate"] = "%{y:.2f} barg at %{x:.2f} L<extra></extra>"
    return Drawing(
        data=[trace],
        layout=layout(
            axis("volume, L", 0, wide),
            axis("barg", low, high),
            shapes=[level(suction, dash="dot"), level(discharge, dash="dot")],
            annotations=[
                label("suction", wide, suction, yanchor="top"),
                label("discharge", wide, discharge),
            ],
        ),
        words=_words(end, pressure, suction, discharge),
    )


def _words(end: EndCurve, pressure: NDArray[np.floating[Any]], suction: float, discharge: float) -> str:
    state = ", suction valves held open," if end.held_open else ""
    return (
        f"{end.side.capitalize()} end{state} by estimate: from {float(np.nanmin(pressure)):.2f} to "
        f"{float(np.nanmax(pressure)):.2f} barg over {end.volume_m3.min() * 1000:.2f} to "
        f"{end.volume_m3.max() * 1000:.2f} L. "
        f"Dotted: measured suction {suction:.2f} and discharge {discharge:.2f} barg."
    )
