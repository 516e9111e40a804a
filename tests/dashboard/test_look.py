"""Colours: every text can be read in light and in dark, and none of them means "well"."""

import re
from importlib.resources import files

import pytest

SHEET = (files("dashboard") / "assets" / "00-look.css").read_text(encoding="utf-8")
TEXTS = ("ink", "soft", "high", "medium", "low", "notice", "limit", "invented", "focus")


def colours(scheme: str) -> dict[str, str]:
    light, dark = re.findall(r":root \{(.*?)\}", SHEET, flags=re.DOTALL)
    return dict(re.findall(r"--([\w-]+): (#[0-9a-f]{6});", dark if scheme == "dark" else light))


def luminance(colour: str) -> float:
    # source: WCAG 2.2, definition of relative luminance
    channels = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(one: str, other: str) -> float:
    high, low = sorted((luminance(one), luminance(other)), reverse=True)
    return (high + 0.05) / (low + 0.05)


def test_the_measure_itself() -> None:
    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)  # source: WCAG 2.2, note to contrast ratio
    assert contrast("#777777", "#ffffff") == pytest.approx(4.48, abs=0.01)  # common practice: just too little


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("ground", ["ground", "panel"])
@pytest.mark.parametrize("text", TEXTS)
def test_text_stands_out(scheme: str, ground: str, text: str) -> None:
    found = colours(scheme)
    assert contrast(found[text], found[ground]) >= 4.5  # source: WCAG 2.2, 1.4.3


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_the_stale_banner_stands_out(scheme: str) -> None:
    found = colours(scheme)
    assert contrast(found["on-alert"], found["high"]) >= 4.5


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("mark", ["edge", "fill"])
def test_lines_that_carry_meaning_stand_out(scheme: str, mark: str) -> None:
    found = colours(scheme)
    assert contrast(found[mark], found["panel"]) >= 2.7


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_no_colour_is_green(scheme: str) -> None:
    for name, colour in colours(scheme).items():
        red, green, blue = (int(colour[i : i + 2], 16) for i in (1, 3, 5))
        assert not (green > 1.15 * red and green > 1.15 * blue), name


def test_colours_stand_in_one_place() -> None:
    rest = SHEET.partition("* { box-sizing")[2]
    assert not re.findall(r"#[0-9a-fA-F]{3,8}\b", rest)
