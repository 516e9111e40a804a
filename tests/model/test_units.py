"""Units: outside definitions, round trips, and refusals that say what to write instead."""

import math
import subprocess
import sys

import numpy as np
import pint
import pytest
from hypothesis import given
from hypothesis import strategies as st

from model import quantities, units

BAROMETER_PA = 101300.0


def parse(text: str, dimension: str) -> float:
    return units.parse(text, dimension, barometer_pa=BAROMETER_PA)


@pytest.mark.parametrize(
    ("text", "dimension", "expected"),
    [
        # source: NIST SP 811 (2008), appendix B.8: pound-force per square inch 6.894757 E+03 Pa
        ("1 psia", "pressure", 6894.757),
        # source: NIST SP 811 (2008), appendix B.8: inch 2.54 E-02 m, exact
        ("1 in", "length", 0.0254),
        # source: NIST SP 811 (2008), appendix B.8: pound-force 4.448222 N
        ("1 lbf", "force", 4.448222),
        # source: NIST SP 811 (2008), appendix B.8: pound avoirdupois 4.535924 E-01 kg
        ("1 lb", "mass", 0.4535924),
        # source: NIST SP 811 (2008), appendix B.8: horsepower (550 ft lbf/s) 7.456999 E+02 W
        ("1 hp", "power", 745.6999),
        # source: NIST SP 811 (2008), appendix B.8: revolution per minute 1.047198 E-01 rad/s
        ("1 rpm", "rotation", 0.1047198),
        # source: CODATA 2018 and 2022, molar volume of an ideal gas at 273.15 K and 101.325 kPa:
        # 22.413 969 54 E-3 m3/mol; a flow of one such volume a second is one mole a second
        (f"{22.41396954e-3 * 3600} Nm3/h", "molar_flow", 1.0),
        # hand: the same at 15 degC, 22.41396954 * 288.15 / 273.15 = 23.644840 l/mol
        (f"{23.644840e-3 * 3600} Sm3/h", "molar_flow", 1.0),
        # from memory: 379.48 standard cubic feet to the pound mole, a figure of the gas trade
        (f"{379.48e-6} MMscfd", "molar_flow", 453.59237 / 86400),
    ],
)
def test_unit_is_worth_what_its_definition_says(text: str, dimension: str, expected: float) -> None:
    # Five in the seventh digit: the tables print seven. The scf figure has five.
    tolerance = 2e-5 if "scfd" in text else 5e-7
    assert parse(text, dimension) == pytest.approx(expected, rel=tolerance)


@pytest.mark.parametrize(
    ("text", "dimension", "expected"),
    [
        # hand
        ("12.5 barg", "pressure", 12.5e5 + BAROMETER_PA),
        ("0 kPag", "pressure", BAROMETER_PA),
        ("19 bara", "pressure", 19e5),
        ("101325 Pa abs", "pressure", 101325.0),
        ("2 bar(g)", "pressure", 2e5 + BAROMETER_PA),
        ("0.6 MPa gauge", "pressure", 6e5 + BAROMETER_PA),
        ("35 degC", "temperature", 308.15),
        ("95 °F", "temperature", 308.15),
        ("300 K", "temperature", 300.0),
        ("\u221220 degC", "temperature", 253.15),
        ("1.8 degF difference", "temperature_difference", 1.0),
        ("17.9 cm2", "area", 17.9e-4),
        ("16 %", "fraction", 0.16),
        ("0.16", "fraction", 0.16),
        ("180 deg", "angle", math.pi),
        ("15 Hz", "rotation", 30 * math.pi),
        ("3.6 kmol/h", "molar_flow", 1.0),
        ("24 min", "time", 1440.0),
        ("2.5", "ratio", 2.5),
        ("60 1/min", "frequency", 1.0),
        ("1.5e3\u00a0N", "force", 1500.0),
    ],
)
def test_text_becomes_si_and_absolute(text: str, dimension: str, expected: float) -> None:
    assert parse(text, dimension) == pytest.approx(expected, rel=1e-12)


def test_unlisted_unit_is_converted_if_it_is_a_plain_multiple() -> None:
    # source: NIST SP 811 (2008), appendix B.8: kilogram-force per square centimetre 9.80665 E+04 Pa
    assert parse("1 kgf/cm2 abs", "pressure") == pytest.approx(98066.5)
    assert parse("60 kg/min", "mass_flow") == pytest.approx(1.0)  # hand


@pytest.mark.parametrize("dimension", ["length", "area", "mass", "power", "force", "mass_flow", "time"])
def test_table_agrees_with_an_independent_registry(dimension: str) -> None:
    registry: pint.UnitRegistry[float] = pint.UnitRegistry()
    base = {
        "length": "m",
        "area": "m**2",
        "mass": "kg",
        "power": "W",
        "force": "N",
        "mass_flow": "kg/s",
        "time": "s",
    }
    for word in units.known_units(dimension):
        spelled = word.replace("2", "**2").replace("klbf", "kilo_pound_force").replace("kilo_", "kilo")
        theirs = registry.Quantity(1.0, spelled).to(base[dimension]).magnitude
        assert units.conversion(word, dimension).scale == pytest.approx(theirs, rel=1e-9), word


def _every_unit() -> list[tuple[str, str]]:
    return [(d, u) for d in units.dimensions() for u in units.known_units(d)]


@given(pair=st.sampled_from(_every_unit()), value=st.floats(-1e6, 1e6, allow_nan=False))
def test_to_si_and_back_is_the_same_number(pair: tuple[str, str], value: float) -> None:
    dimension, unit = pair
    there = units.conversion(unit, dimension, barometer_pa=BAROMETER_PA)
    back = there.from_si(there.to_si(value))
    # The offset of a gauge pressure costs digits: 1e5 Pa of offset on a unit of 1 Pa leaves 1e-11 of it.
    slack = 1e-15 * abs(there.offset / there.scale) * 4
    assert back == pytest.approx(value, rel=1e-12, abs=slack + 1e-300)


@given(pair=st.sampled_from(_every_unit()), value=st.floats(0, 1e6, allow_nan=False))
def test_parsing_reads_what_formatting_wrote(pair: tuple[str, str], value: float) -> None:
    dimension, unit = pair
    there = units.conversion(unit, dimension, barometer_pa=BAROMETER_PA)
    text = units.format_value(there.to_si(value), unit, dimension, 3, barometer_pa=BAROMETER_PA)
    assert units.parse(f"{text} {unit}", dimension, barometer_pa=BAROMETER_PA) == pytest.approx(
        there.to_si(float(text)), rel=1e-12
    )
    assert float(text) == pytest.approx(value, abs=0.000501, rel=1e-9)


def test_array_equals_loop_of_scalars() -> None:
    there = units.conversion("barg", "pressure", barometer_pa=BAROMETER_PA)
    values = np.array([0.0, 1.5, 41.25, np.nan])
    looped = [there.to_si(float(v)) for v in values]
    np.testing.assert_array_equal(there.to_si(values), looped)
    np.testing.assert_array_equal(there.from_si(there.to_si(values)), [there.from_si(x) for x in looped])


REFERENCE = "a pressure that says gauge or absolute, e.g. 18 barg or 19 bara"
SEPARATOR = "a number with a decimal point and no other separator"
LENGTH = "a length, e.g. 195 mm"
NUMBER = "a number followed by its unit"
FLOW_HINT = "say the reference state: Nm3/h is 0 degC, Sm3/h is 15 degC, both at 1.01325 bar"


@pytest.mark.parametrize(
    ("text", "dimension", "expected", "hint"),
    [
        ("18 bar", "pressure", REFERENCE, "write barg or bara"),
        ("18 psi", "pressure", REFERENCE, "write psig or psia"),
        ("3 kPa", "pressure", REFERENCE, "write kPag or kPaa"),
        ("1 Pa", "pressure", REFERENCE, "write Pa gauge or Pa abs"),
        ("18 barq", "pressure", REFERENCE, "did you mean barg?"),
        ("12,5 barg", "pressure", SEPARATOR, "write 12.5"),
        ("1,000 rpm", "rotation", SEPARATOR, "write 1.000 or 1000"),
        ("1 000 rpm", "rotation", SEPARATOR, "write 1000"),
        ("1'200 kW", "power", SEPARATOR, "write 1200"),
        ("1.234,5 kW", "power", SEPARATOR, "write 1234.5, not 1,234.5 or 1.234,5"),
        (
            "1 degC",
            "temperature_difference",
            "a temperature difference, e.g. 1 K",
            "write K or 'degC difference'",
        ),
        ("35 C", "temperature", "a temperature, e.g. 35 degC", "write degC"),
        ("-300 degC", "temperature", "a temperature above absolute zero", ""),
        ("-2 barg", "pressure", "a pressure above absolute zero", ""),
        ("12", "length", LENGTH, "the unit is missing"),
        ("12 mmm", "length", LENGTH, "did you mean mm?"),
        ("12 kg", "length", LENGTH, "known: m, cm, mm, in, ft"),
        ("nan kN", "force", NUMBER, ""),
        ("1e999 kN", "force", "a finite number", ""),
        ("", "time", NUMBER, ""),
        ("10 m3/h", "molar_flow", "a molar or normal volume flow, e.g. 12000 Nm3/h", FLOW_HINT),
    ],
)
def test_refusal_says_what_to_write(text: str, dimension: str, expected: str, hint: str) -> None:
    with pytest.raises(units.UnitError) as caught:
        parse(text, dimension)
    assert (caught.value.expected, caught.value.hint) == (expected, hint)
    assert str(caught.value) == f"{text!r}: expected {expected}" + (f" ({hint})" if hint else "")


def test_gauge_without_a_barometer_is_refused() -> None:
    with pytest.raises(units.UnitError, match="a gauge pressure needs the barometer"):
        units.parse("12 barg", "pressure")


_ODD_UNITS = st.from_regex(r"1 [A-Za-z_]{1,6}[0-9]?([*/][A-Za-z]{1,3}[0-9]?)?[ag]?", fullmatch=True)


@given(text=st.text(max_size=20) | _ODD_UNITS, dimension=st.sampled_from(units.dimensions()))
def test_any_text_is_a_finite_number_or_a_unit_error(text: str, dimension: str) -> None:
    try:
        value = parse(text, dimension)
    except units.UnitError:
        return
    assert math.isfinite(value)


def test_range_may_leave_out_the_first_unit() -> None:
    # hand
    expected = (BAROMETER_PA, 60e5 + BAROMETER_PA)
    assert units.parse_range("0 barg to 60 barg", "pressure", barometer_pa=BAROMETER_PA) == expected
    assert units.parse_range("0 to 60 barg", "pressure", barometer_pa=BAROMETER_PA) == expected


@pytest.mark.parametrize("text", ["60 barg to 0 barg", "5 barg", "1 to 1 barg", "to 5 barg", "a to b"])
def test_range_needs_a_low_and_a_higher_end(text: str) -> None:
    with pytest.raises(units.UnitError):
        units.parse_range(text, "pressure", barometer_pa=BAROMETER_PA)


@pytest.mark.parametrize(
    ("value", "unit", "dimension", "decimals", "shown"),
    [
        # hand
        (12.5e5 + BAROMETER_PA, "barg", "pressure", 2, "12.50 barg"),
        (308.15, "degC", "temperature", 1, "35.0 °C"),
        (math.radians(20), "deg", "angle", 0, "20°"),
        (0.163, "%", "fraction", 1, "16.3 %"),
        (-12.0, "kN", "force", 1, "0.0 kN"),
        (-120.0, "kN", "force", 1, "-0.1 kN"),
        (math.nan, "kN", "force", 1, "–"),
        (math.inf, "kN", "force", 1, "–"),
        (2.345, "1", "ratio", 2, "2.35"),
    ],
)
def test_number_is_shown_the_same_everywhere(
    value: float, unit: str, dimension: str, decimals: int, shown: str
) -> None:
    assert units.format_with_unit(value, unit, dimension, decimals, barometer_pa=BAROMETER_PA) == shown


def test_every_display_unit_of_the_glossary_converts() -> None:
    for quantity in quantities.QUANTITIES.values():
        there = units.conversion(quantity.display_unit, quantity.dimension, barometer_pa=BAROMETER_PA)
        assert there.scale > 0, quantity.key


def test_importing_units_does_not_load_pint() -> None:
    code = "import sys, model.units; sys.exit('pint' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
