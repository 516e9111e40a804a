"""The working of one cylinder: flow and power of its ends, loads on its rod, reversal at its pin."""

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.corrections import Corrections
from model.machine import Cylinder, End, OtherSide, Side, Unit
from model.throw import ANGLES, EndRun, Frame, end_runs, loads_at, opening_angles
from model.working import Sheet

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

_JOEL: Final = "R. Joel, Basic Engineering Thermodynamics, ch. 14"
_KHURMI: Final = "R. S. Khurmi, J. K. Gupta, Theory of Machines, ch. 15"
_BLOCH: Final = "H. P. Bloch, J. J. Hoefner, Reciprocating Compressors (1996), p. 85, and the atmosphere"
_API: Final = "the measures of API Standard 618, 5th ed., 6.6.4"
_ORIFICE: Final = "quasi-steady flow through an orifice"

LOADS: Final = {
    "gas_load_tension": ("gas", 1.0),
    "gas_load_compression": ("gas", -1.0),
    "pin_load_tension": ("pin", 1.0),
    "pin_load_compression": ("pin", -1.0),
    "rod_load_tension": ("rod", 1.0),
    "rod_load_compression": ("rod", -1.0),
}


_LOAD_LETTERS: Final = {"gas": "G", "pin": "P", "rod": "R"}
_LOAD_WORDS: Final = {
    "gas": "gas load", "pin": "combined load at the pin", "rod": "combined load at the piston rod",
}  # fmt: skip


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Set:
    """What the working of a cylinder hangs on."""

    unit: Unit
    cylinder: Cylinder
    frame: Frame
    corrections: Corrections
    held_open: dict[Side, Mask]


def letter(side: Side) -> str:
    """Suffix of an end's symbols."""
    return "H" if side is Side.HEAD else "C"


def tag(cylinder: Cylinder, side: Side) -> str:
    """Suffix of the symbols of an end of one cylinder of several."""
    return f"{cylinder.number}{letter(side)}"


def geometry(sheet: Sheet, at: Set) -> None:
    """Areas, clearances and swept flows of both ends, with their efficiency, flow and losses."""
    cylinder, number = at.cylinder, at.cylinder.number
    sheet.given(f"D_{number}", f"bore of cylinder {number}", cylinder.bore_m, "m", "nameplate")
    sheet.given(f"d_{number}", "piston rod diameter", cylinder.rod_diameter_m, "m", "nameplate")
    sheet.given(f"t_{number}", "tail rod diameter", cylinder.tail_rod_diameter_m, "m", "nameplate")
    sheet.given(f"m_{number}", "mass outboard of the pin", cylinder.reciprocating_mass_kg, "kg", "nameplate")
    sheet.given(f"mx_{number}", "that of its crosshead", cylinder.crosshead_mass_kg, "kg", "nameplate")
    sheet.given(
        f"f_{number}", "natural frequency of the valve plates", cylinder.valve_natural_frequency_hz, "Hz",
        "nameplate",
    )  # fmt: skip
    for side, rod in ((Side.HEAD, "t"), (Side.CRANK, "d")):
        sheet.step(
            f"A_{tag(cylinder, side)}", f"piston area of the {side} end",
            f"pi/4 * (D_{number}**2 - {rod}_{number}**2)", "m2", "geometry",
        )  # fmt: skip
    for run in end_runs(cylinder, at.frame, at.held_open):
        _end(sheet, at, run)


def _end(sheet: Sheet, at: Set, run: EndRun) -> None:
    end, e = run.end, tag(at.cylinder, run.end.side)
    side = f"{run.end.side} end of cylinder {at.cylinder.number}"
    loaded = not bool(run.cycle.held_open[0, 0])
    _clearance(sheet, at, end, e)
    sheet.given(
        f"f_s{e}", "effective suction valve area / piston area", end.suction_area_ratio, "1", "nameplate"
    )
    sheet.given(
        f"f_d{e}", "effective discharge valve area / piston area", end.discharge_area_ratio, "1", "nameplate"
    )
    sheet.given(f"a_{e}", "1 if the end is loaded, 0 if held open", float(loaded), "1", "load-step table")
    sheet.step(
        f"VE_{e}", f"volumetric efficiency of the {side} when loaded",
        f"max(rho_1/rho_s * (1 + c_{e} - c_{e} * r**(1/(k_e*n)){_late(end, e)}) - dve, 0)", "1", _JOEL,
    )  # fmt: skip
    sheet.step(f"Q_{e}", f"volume swept by the {side}", f"A_{e} * S * w / (2*pi)", "m3/s", "geometry")
    sheet.step(f"F_{e}", f"mass flow of the {side}", f"a_{e} * VE_{e} * Q_{e} * rho_s", "kg/s", "definition")
    sheet.step(
        f"K_s{e}", "suction loss / square of the travel rate", f"k_v * rho_s * w**2 / (2 * f_s{e}**2)",
        "Pa rad2/m2", _ORIFICE,
    )  # fmt: skip
    if not loaded:
        return
    sheet.step(
        f"K_d{e}", "discharge loss / square of the travel rate", f"k_v * rho_2 * w**2 / (2 * f_d{e}**2)",
        "Pa rad2/m2", _ORIFICE,
    )  # fmt: skip
    number = at.cylinder.number
    sheet.step(f"l_s{e}", "ln of volume at which suction opens", "log(r) / (k_e*n)", "1", _JOEL)
    late = f"l_c{e} + " if end.valve_closing_rad > 0 else ""
    sheet.step(f"l_d{e}", "ln of volume at which discharge opens", f"{late}log(r) / (k_c*n)", "1", _JOEL)
    openings = (
        (f"s{e}", f"c_{e} * exp(l_s{e})", "k_e", "p_s"),
        (f"d{e}", f"(1 + c_{e}) * exp(-l_d{e})", "k_c", "p_d"),
    )
    for which, volume, exponent, line in openings:
        sheet.step(f"V_{which}", "volume there / swept volume", volume, "1", _JOEL)
        share = f"min(max(V_{which} - c_{e}, 0), 1)"
        sheet.step(
            f"z_{which}", "travel there", f"S * {share}" if end.side is Side.HEAD else f"S * (1 - {share})",
            "m", "geometry",
        )  # fmt: skip
        sheet.step(
            f"th_{which}", "crank angle there, on the way out",
            f"acos(((R + L - z_{which})**2 + R**2 - L**2) / (2 * (R + L - z_{which}) * R))", "rad", _KHURMI,
        )  # fmt: skip
        sheet.step(
            f"o_{which}", "pressure past the line before the plate follows",
            f"os*w/(2*pi*f_{number}) * {exponent}*n*{line} * abs({_rate(f'th_{which}')}) / S / V_{which}",
            "Pa", "derived",
        )  # fmt: skip


def _clearance(sheet: Sheet, at: Set, end: End, e: str) -> None:
    """Clearance with its pockets, and where compression begins if the suction valves close late."""
    words = f"clearance of the {end.side} end of cylinder {at.cylinder.number}"
    _, bare = at.unit.cylinder(at.cylinder.number)
    plain = next(other for other in bare.ends if other.side is end.side)
    if end.clearance == plain.clearance:
        sheet.given(f"c_{e}", words, end.clearance, "1", "nameplate")
    else:
        sheet.given(f"c0_{e}", f"{words}, pockets shut", plain.clearance, "1", "nameplate")
        sheet.given(
            f"cp_{e}", "what its pockets add", end.clearance - plain.clearance, "1", "load-step table"
        )
        sheet.step(f"c_{e}", words, f"c0_{e} + cp_{e}", "1", "geometry")
    if end.valve_closing_rad <= 0:
        return
    sheet.given(
        f"y_{e}", "crank angle past dead centre at which its suction valves close", end.valve_closing_rad,
        "rad", "load-step table",
    )  # fmt: skip
    theta = f"(pi + y_{e})" if end.side is Side.HEAD else f"y_{e}"
    travel = f"(R*(1 - cos({theta})) + L*(1 - sqrt(1 - (lam*sin({theta}))**2)))/S"
    back = f"1 - {travel}" if end.side is Side.HEAD else travel
    sheet.step(f"q_{e}", "share of the swept volume pushed back until then", back, "1", _KHURMI)
    sheet.step(
        f"l_c{e}", "ln of the largest volume / volume there", f"-log(1 - q_{e}/(1 + c_{e}))", "1", "geometry"
    )


def _late(end: End, e: str) -> str:
    return f" - q_{e}" if end.valve_closing_rad > 0 else ""


def _rate(theta: str) -> str:
    """Travel rate by crank angle, as text."""
    return f"(R*sin({theta}) + R*lam*sin({theta})*cos({theta})/sqrt(1 - (lam*sin({theta}))**2))"


def trace(sheet: Sheet, at: Set, suffix: str, angle: Array, words: str) -> None:
    """Pressures of both ends, gas load, inertia and pin load at one angle or at many.

    Symbols end in the suffix, which starts with the number of the cylinder.
    """
    number = at.cylinder.number
    th = f"th_{suffix}"
    sheet.given(th, words, angle, "rad", "search" if angle.ndim == 0 else "equal steps of one turn")
    sheet.step(
        f"x_{suffix}", "piston travel from the head-end dead centre",
        f"R*(1 - cos({th})) + L*(1 - sqrt(1 - (lam*sin({th}))**2))", "m", _KHURMI,
    )  # fmt: skip
    sheet.step(f"u_{suffix}", "travel rate", _rate(th), "m/rad", _KHURMI)
    sheet.step(
        f"b_{suffix}", "second derivative of the travel",
        f"R*(cos({th}) + lam*(cos({th})**2 - sin({th})**2)/sqrt(1 - (lam*sin({th}))**2)"
        f" + lam**3*sin({th})**2*cos({th})**2/sqrt(1 - (lam*sin({th}))**2)**3)", "m/rad2", _KHURMI,
    )  # fmt: skip
    outgoing = np.asarray(np.mod(angle, 2 * np.pi) < np.pi, np.float64)
    sheet.given(f"g_{suffix}", "1 while the piston goes towards the crank", outgoing, "1", "the angle")
    present = {}
    for run in end_runs(at.cylinder, at.frame, at.held_open):
        present[run.end.side] = _pressure(sheet, at, run, suffix)
    for side in Side:
        if side not in present:
            symbol, suction = f"p_{letter(side)}{suffix}", at.cylinder.other_side is OtherSide.SUCTION
            words, line = ("the suction line", "p_s") if suction else ("the air", "p_a + 0*p_s")
            sheet.step(symbol, f"the {side} side is open to {words}", line, "Pa", "construction")
    head, crank = tag(at.cylinder, Side.HEAD), tag(at.cylinder, Side.CRANK)
    outside = f"p_a*(A_{head} - A_{crank})"
    if at.cylinder.distance_piece_pressure_pa is not None:
        piece = at.cylinder.distance_piece_pressure_pa
        sheet.given(f"p_p{suffix}", "pressure in the distance piece", piece, "Pa", "nameplate")
        outside += f" + (p_p{suffix} - p_a) * pi/4*d_{number}**2"
    sheet.step(
        f"G_{suffix}", "gas load, tension positive",
        f"p_C{suffix}*A_{crank} - p_H{suffix}*A_{head} + {outside}", "N", _BLOCH,
    )  # fmt: skip
    sheet.step(f"I_{suffix}", "inertia load", f"m_{number} * w**2 * b_{suffix}", "N", _KHURMI)
    sheet.step(f"P_{suffix}", "combined load at the pin", f"G_{suffix} + I_{suffix}", "N", "API Standard 618")
    sheet.step(
        f"R_{suffix}", "combined load at the piston rod",
        f"G_{suffix} + (1 - mx_{number}/m_{number}) * I_{suffix}", "N", "the same without the crosshead",
    )  # fmt: skip


def _pressure(sheet: Sheet, at: Set, run: EndRun, suffix: str) -> str:
    """Steps of the pressure of one end."""
    e, side = tag(at.cylinder, run.end.side), letter(run.end.side)
    head = run.end.side is Side.HEAD
    travel = f"x_{suffix}/S" if head else f"1 - x_{suffix}/S"
    name, volume = f"p_{side}{suffix}", f"v_{side}{suffix}"
    sheet.step(volume, "volume / swept volume", f"c_{e} + {travel}", "1", "geometry")
    draws = f"g_{suffix}" if head else f"(1 - g_{suffix})"
    speed = f"u_{suffix}**2"
    what = f"pressure of the {run.end.side} end"
    if bool(run.cycle.held_open[0, 0]):
        sign = f"where({draws}, -1, 1)"
        sheet.step(name, f"{what}, held open", f"p_s + {sign} * K_s{e} * {speed}", "Pa", _ORIFICE)
        return name
    grows, shrinks = f"log({volume}/c_{e})", f"log((1 + c_{e})/{volume})"
    late, dead = run.end.valve_closing_rad > 0, bool(run.cycle.dead[0, 0])
    span = f"log((1 + c_{e})/c_{e})"
    reached = f"min(p_s * exp(k_c*n * ({span} - l_c{e})), p_d)" if late and dead else "p_d"
    expansion = f"{reached} * exp(-k_e*n * {grows})"
    if dead and not late:
        trapped = f"p_d * exp(-k_e*n * ({span} - {shrinks}))"
        sheet.step(
            name, f"{what}, clearance gas to and fro", f"where({draws}, {expansion}, {trapped})", "Pa", _JOEL
        )
        return name
    line_s = f"p_s - plate(K_s{e}*{speed}, p_s, p0, p1) - o_s{e} * exp(-max({grows} - l_s{e}, 0)/wo)"
    line_d = f"p_d + plate(K_d{e}*{speed}, p_d, p0, p1) + o_d{e} * exp(-max({shrinks} - l_d{e}, 0)/wo)"
    compression = f"p_s * exp(k_c*n * {shrinks})"
    if late:
        compression = (
            f"where(below({shrinks}, l_c{e}), p_s + K_s{e}*{speed}, p_s * exp(k_c*n * ({shrinks} - l_c{e})))"
        )
    sheet.step(
        name, f"{what}: re-expansion until suction opens, compression until discharge opens",
        f"where({draws}, max({expansion}, {line_s}), min({compression}, {line_d}))", "Pa",
        f"{_JOEL}; valve loss: {_ORIFICE}, plates derived",
    )  # fmt: skip
    return name


def power(sheet: Sheet, at: Set) -> list[str]:
    """Indicated power of each end, over equal steps of one turn; the symbols of the results."""
    number = at.cylinder.number
    angle = np.arange(ANGLES, dtype=np.float64) * (2 * np.pi / ANGLES)
    trace(sheet, at, str(number), angle, f"crank angle, {ANGLES} steps")
    sheet.given(f"N_{number}", "steps of one turn", float(ANGLES), "1", "constant")
    found = []
    for end in at.cylinder.ends:
        e, side = tag(at.cylinder, end.side), letter(end.side)
        sign = "" if end.side is Side.HEAD else "-"
        sheet.step(
            f"W_{e}", f"indicated power of the {end.side} end of cylinder {number}",
            f"-Q_{e} * sum(p_{side}{number} * {sign}u_{number}/S) * 2*pi/N_{number}", "W",
            "integral of pressure over volume",
        )  # fmt: skip
        found.append(f"W_{e}")
    return found


def peak(sheet: Sheet, at: Set, key: str) -> str:
    """Steps of one peak load at the angle where it stands; the symbol of the result."""
    kind, sign = LOADS[key]
    number = at.cylinder.number
    angles = np.arange(ANGLES, dtype=np.float64)[None, :] * (2 * np.pi / ANGLES)
    angles = np.concatenate([angles, opening_angles(at.cylinder, at.frame, at.held_open)], axis=1)
    gas, inertia = loads_at(at.cylinder, end_runs(at.cylinder, at.frame, at.held_open), at.frame, angles)
    carried = {"gas": 0.0, "pin": 1.0, "rod": at.cylinder.rod_mass_share}[kind]
    load = sign * (gas + carried * inertia)[0]
    place = int(np.argmax(load))
    word = "tension" if sign > 0 else "compression"
    suffix = f"{number}{kind}{word[0]}"
    where = f"angle of the largest {word}, sought at {ANGLES} steps and where valves open"
    trace(sheet, at, suffix, np.asarray(angles[0, place]), where)
    result = f"{kind}_{word}_{number}"
    load_symbol = f"{_LOAD_LETTERS[kind]}_{suffix}"
    text = f"max({load_symbol}, 0)" if sign > 0 else f"max(-{load_symbol}, 0)"
    load_words = _LOAD_WORDS[kind]
    sheet.step(result, f"largest {word}, {load_words}", text, "N", "API Standard 618, 5th ed., 6.6")
    return result


def reversal_steps(sheet: Sheet, at: Set) -> tuple[str, str]:
    """Steps of both measures of reversal; symbols of duration and magnitude. Power must stand already."""
    number = at.cylinder.number
    for key in ("pin_load_tension", "pin_load_compression"):
        peak(sheet, at, key)
    tension, compression = f"pin_tension_{number}", f"pin_compression_{number}"
    duration, magnitude = f"rev_{number}", f"revm_{number}"
    sheet.step(
        duration, "duration of load reversal at the pin",
        f"reversal_angle(P_{number}, {tension}, {compression})", "rad", _API,
    )  # fmt: skip
    sheet.step(
        magnitude, "lesser peak / greater peak, none without reversal",
        f"where({duration}, min({tension}, {compression}) / max({tension}, {compression}), 0)", "1", _API,
    )  # fmt: skip
    return duration, magnitude


def crossings(sheet: Sheet, at: Set) -> str:
    """How often the load at the pin changes sign; power and both measures of reversal must stand already."""
    number = at.cylinder.number
    symbol = f"crossings_{number}"
    sheet.step(
        symbol, "changes of sign of the load at the pin in a turn",
        f"reversal_crossings(P_{number}, pin_tension_{number}, pin_compression_{number})", "1", _API,
    )  # fmt: skip
    return symbol
