"""Text <-> SI: the only conversions of the tool.

A number enters as text with its unit ("12.5 barg", "7.75 in", "95 degF") and is SI and absolute from then on.
Every conversion is linear, so an array of readings costs one multiplication and one addition.
A pressure always says whether it is gauge or absolute, and gauge needs the barometer.
"""

import difflib
import math
import re
from functools import lru_cache
from types import MappingProxyType
from typing import Any, Final

from model.unit_table import DIMENSIONS, PRESSURE_BASES, Conversion, Dimension

__all__ = [
    "NO_VALUE", "Conversion", "UnitError", "conversion", "dimensions", "example", "format_value",
    "format_with_unit", "known_units", "parse", "parse_range", "split", "unit_label", "words",
]  # fmt: skip

NO_VALUE: Final = "–"


class UnitError(ValueError):
    """A text is not a number with a unit of the asked dimension."""

    def __init__(self, text: str, expected: str, hint: str = "") -> None:
        self.text = text
        self.expected = expected
        self.hint = hint
        super().__init__(f"{text!r}: expected {expected}" + (f" ({hint})" if hint else ""))


_SPELLINGS: Final = MappingProxyType({"°C": "degC", "°F": "degF", "°": "deg", "percent": "%"})
_REFERENCE: Final = re.compile(r"(?P<base>.+?)\s*\(?(?P<reference>abs|absolute|gauge|gage|a|g)\)?")
_NUMBER: Final = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?", re.ASCII)
_SEPARATED: Final = re.compile(r"[+-]?\d+(?:\.\d+)*(?:[,'_’]\d+| \d{3}\b)+(?:[.,]\d+)*")
_PINT_WORD: Final = re.compile(r"[A-Za-z_]+[0-9]?(?:[*/][A-Za-z_]+[0-9]?){0,3}")


def _tidy(text: str) -> str:
    """Spaces and signs as a keyboard has them: pasted text brings no-break spaces and long minus signs."""
    return " ".join(text.replace("\u2212", "-").replace("²", "2").replace("³", "3").split())


def dimensions() -> tuple[str, ...]:
    """Every dimension that can be converted."""
    return tuple(DIMENSIONS)


def known_units(dimension: str) -> tuple[str, ...]:
    """Unit words of a dimension, for a message or a guide; a pressure gives each base in both references."""
    if dimension == "pressure":
        return tuple(f"{base}{'' if base != 'Pa' else ' '}{ref}" for base, ref in _pressure_words())
    return tuple(DIMENSIONS[dimension].units)


def words(dimension: str) -> str:
    """The dimension in words, with its article: "a length"."""
    return DIMENSIONS[dimension].words


def example(dimension: str) -> str:
    """The dimension in words with an example of how to write it: "a length, e.g. 195 mm"."""
    return f"{DIMENSIONS[dimension].words}, e.g. {DIMENSIONS[dimension].example}"


def _pressure_words() -> tuple[tuple[str, str], ...]:
    pairs = []
    for base in PRESSURE_BASES:
        pairs += [(base, "abs" if base == "Pa" else "a"), (base, "gauge" if base == "Pa" else "g")]
    return tuple(pairs)


@lru_cache(maxsize=512)
def conversion(unit: str, dimension: str, *, barometer_pa: float | None = None) -> Conversion:
    """The linear conversion of one unit to SI.

    Parameters
    ----------
    unit : str
        The unit as written, e.g. "barg", "degC", "Nm3/h".
    dimension : str
        A dimension of the glossary, e.g. "pressure".
    barometer_pa : float, optional
        Absolute pressure of the surroundings [Pa]; needed by gauge pressures only.

    Returns
    -------
    Conversion
        Scale and offset to SI and absolute.

    Raises
    ------
    UnitError
        The unit is unknown, of another dimension, or a pressure that leaves its reference open.
    KeyError
        The dimension is unknown.
    """
    row = DIMENSIONS[dimension]
    word = _tidy(unit)
    word = _SPELLINGS.get(word, word)
    if dimension == "pressure":
        return _pressure(word, barometer_pa)
    if word in row.units:
        return row.units[word]
    factor = _asked_of_pint(word, row.si) if row.si else None
    if factor is not None:
        return Conversion(factor)
    raise UnitError(unit, f"a unit of {row.words}, e.g. {row.example}", _unit_hint(word, dimension))


def _pressure(word: str, barometer_pa: float | None) -> Conversion:
    expected = "a pressure that says gauge or absolute, e.g. 18 barg or 19 bara"
    match = _REFERENCE.fullmatch(word)
    base = None if match is None else _pressure_base(match["base"])
    if match is None or base is None:
        raise UnitError(word, expected, _pressure_hint(word))
    if match["reference"] in ("a", "abs", "absolute"):
        return base
    if barometer_pa is None:
        raise UnitError(word, "an absolute pressure", "a gauge pressure needs the barometer")
    return Conversion(base.scale, barometer_pa)


def _pressure_base(word: str) -> Conversion | None:
    if word in PRESSURE_BASES:
        return PRESSURE_BASES[word]
    factor = _asked_of_pint(word, "Pa")
    return None if factor is None else Conversion(factor)


def _pressure_hint(word: str) -> str:
    if word == "Pa":
        return "write Pa gauge or Pa abs"
    if _pressure_base(word) is not None:
        return f"write {word}g or {word}a"
    return _closest(word, known_units("pressure"))


def _unit_hint(word: str, dimension: str) -> str:
    if dimension == "temperature_difference" and word in ("degC", "degF"):
        return f"write K or '{word} difference'"
    if dimension == "temperature" and word in ("C", "F"):
        return f"write deg{word}"
    if dimension == "molar_flow" and word.startswith(("m3", "ft3")):
        return "say the reference state: Nm3/h is 0 degC, Sm3/h is 15 degC, both at 1.01325 bar"
    return _closest(word, known_units(dimension))


def _closest(word: str, known: tuple[str, ...]) -> str:
    if not word:
        return "the unit is missing"
    lowered = {k.lower(): k for k in known}
    near = difflib.get_close_matches(word.lower(), lowered, n=1, cutoff=0.5)
    return f"did you mean {lowered[near[0]]}?" if near else f"known: {', '.join(known)}"


@lru_cache(maxsize=1)
def _registry() -> Any:
    # The registry costs a noticeable part of a second, and only an unusual unit needs it.
    import pint  # noqa: PLC0415

    return pint.UnitRegistry()


@lru_cache(maxsize=512)
def _asked_of_pint(word: str, si: str) -> float | None:
    """Factor of a unit that the tables above do not hold, if it is a plain multiple of the SI unit."""
    if not _PINT_WORD.fullmatch(word):
        return None
    import pint  # noqa: PLC0415

    spelled = re.sub(r"(?<=[A-Za-z_])([0-9])", r"**\1", word)
    try:
        factor = float(_registry().Quantity(1.0, spelled).to(si).magnitude)
    except (
        pint.PintError,
        ArithmeticError,
        AssertionError,
        AttributeError,
        LookupError,
        TypeError,
        ValueError,
    ):
        return None  # not a unit, not of this dimension, or two prefixes that could be meant
    return factor if factor > 0 and math.isfinite(factor) else None


def split(text: str) -> tuple[float, str]:
    """Number and unit word of a text such as "12.5 barg"; the word is empty where there is none.

    Raises
    ------
    UnitError
        The text does not start with a finite number written with a decimal point and no other separator.
    """
    tidy = _tidy(text)
    separated = _SEPARATED.match(tidy)
    if separated:
        raise UnitError(
            text, "a number with a decimal point and no other separator", _separator_hint(separated.group())
        )
    match = _NUMBER.match(tidy)
    if match is None:
        raise UnitError(text, "a number followed by its unit")
    number = float(match.group())
    if not math.isfinite(number):
        raise UnitError(text, "a finite number")
    return number, tidy[match.end() :].strip()


def _separator_hint(number: str) -> str:
    if number.count(",") == 1 and re.fullmatch(r"[+-]?\d+,\d+", number):
        point, none = number.replace(",", "."), number.replace(",", "")
        return f"write {point} or {none}" if len(number.partition(",")[2]) == 3 else f"write {point}"
    if "," not in number:
        return "write " + re.sub(r"[^0-9.+-]", "", number)
    return "write 1234.5, not 1,234.5 or 1.234,5"


def parse(text: str, dimension: str, *, barometer_pa: float | None = None) -> float:
    """SI value of a text such as "12.5 barg", absolute.

    Parameters
    ----------
    text : str
        A number and its unit. A fraction or a ratio may stand without a unit.
    dimension : str
        A dimension of the glossary, e.g. "pressure".
    barometer_pa : float, optional
        Absolute pressure of the surroundings [Pa]; needed by gauge pressures only.

    Returns
    -------
    float
        The value in SI, pressures and temperatures absolute.

    Raises
    ------
    UnitError
        The text cannot be read, or lies below absolute zero.
    """
    row = DIMENSIONS[dimension]
    try:
        number, word = split(text)
        if not word and "1" in row.units:
            word = "1"
        value = conversion(word, dimension, barometer_pa=barometer_pa).to_si(number)
    except UnitError as error:
        raise UnitError(text, _expected(row, error), error.hint) from None
    if dimension in ("pressure", "temperature") and value < 0:
        raise UnitError(text, f"{row.words} above absolute zero")
    return value


def _expected(row: Dimension, error: UnitError) -> str:
    if error.expected.startswith("a unit of"):
        return f"{row.words}, e.g. {row.example}"
    return error.expected


def parse_range(text: str, dimension: str, *, barometer_pa: float | None = None) -> tuple[float, float]:
    """Low and high end in SI of a text such as "0 barg to 60 barg" or "0 to 60 barg".

    Raises
    ------
    UnitError
        It is not two values with "to" between them, or the low end is not below the high end.
    """
    low_text, separator, high_text = _tidy(text).partition(" to ")
    if not separator:
        example = DIMENSIONS[dimension].example
        raise UnitError(
            text, "two values with 'to' between them", f"e.g. 0 {split(example)[1]} to {example}".strip()
        )
    low_number, low_word = split(low_text)
    if not low_word:
        low_text = f"{low_number!r} {split(high_text)[1]}"
    low = parse(low_text, dimension, barometer_pa=barometer_pa)
    high = parse(high_text, dimension, barometer_pa=barometer_pa)
    if not low < high:
        raise UnitError(text, "a low end below the high end")
    return low, high


_LABELS: Final = MappingProxyType(
    {
        "degC": "°C", "degF": "°F", "deg": "°", "1": "", "word": "", "switch": "", "Nm3/h": "Nm³/h",
        "Nm3/d": "Nm³/d", "Sm3/h": "Sm³/h", "Sm3/d": "Sm³/d", "m2": "m²",
        "cm2": "cm²", "mm2": "mm²", "in2": "in²",
    }
)  # fmt: skip


def unit_label(unit: str) -> str:
    """How a page writes a unit: "°C" for "degC", nothing for "1"."""
    return _LABELS.get(unit, unit)


def format_value(
    value_si: float, unit: str, dimension: str, decimals: int, *, barometer_pa: float | None = None
) -> str:
    """The number a page shows, without its unit; a dash where there is no number.

    Every page, export and message uses this one function, so a number reads the same everywhere.
    """
    value = float(value_si)
    if not math.isfinite(value):
        return NO_VALUE
    text = f"{conversion(unit, dimension, barometer_pa=barometer_pa).from_si(value):.{decimals}f}"
    # A rounded nought has no sign.
    return text.lstrip("-") if float(text) == 0 else text


def format_with_unit(
    value_si: float, unit: str, dimension: str, decimals: int, *, barometer_pa: float | None = None
) -> str:
    """The number with its unit, e.g. "41.3 barg"; a dash alone where there is no number."""
    text = format_value(value_si, unit, dimension, decimals, barometer_pa=barometer_pa)
    label = unit_label(unit)
    if text == NO_VALUE or not label:
        return text
    return f"{text}{label}" if label == "°" else f"{text} {label}"
