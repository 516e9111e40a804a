"""The charts, without a browser."""

import numpy as np
import plotly.graph_objects as go
import pytest

from dashboard.figures.look import Drawing, ceiling
from dashboard.figures.pin_load import PinLoadCurves, pin_load_figure
from dashboard.figures.pv_card import EndCurve, pv_figure

ANGLE = np.linspace(0.0, 360.0, 361)


def loads(**changes: object) -> PinLoadCurves:
    given = {
        "crank_angle_deg": ANGLE,
        "pin_load_n": 100e3 * np.cos(np.radians(ANGLE)) - 20e3,
        "gas_load_n": 70e3 * np.cos(np.radians(ANGLE)) - 20e3,
        "inertia_load_n": 30e3 * np.cos(np.radians(ANGLE)),
        "tension_limit_n": 160e3,
        "compression_limit_n": 150e3,
        "reversal_deg": [(281.5, 438.5)],
    }
    return PinLoadCurves(**(given | changes))  # type: ignore[arg-type]


def end(**changes: object) -> EndCurve:
    turn = np.radians(ANGLE)
    given = {
        "side": "head",
        "held_open": False,
        "volume_m3": 2e-3 - 1.5e-3 * np.cos(turn),
        "pressure_pa": 30e5 + 10e5 * np.cos(turn),
        "suction_pressure_pa": 21e5,
        "discharge_pressure_pa": 39e5,
    }
    return EndCurve(**(given | changes))  # type: ignore[arg-type]


@pytest.mark.parametrize(
    "drawing", [pin_load_figure(loads()), pv_figure(end(), highest_volume_m3=4e-3, barometer_pa=1e5)]
)
def test_plotly_takes_the_figure(drawing: Drawing) -> None:
    """Colours are names of page variables, which only the browser knows."""

    def coloured(node: object) -> object:
        if isinstance(node, str):
            return "black" if node.startswith("--") else node
        if isinstance(node, dict):
            return {k: coloured(v) for k, v in node.items()}
        return [coloured(n) for n in node] if isinstance(node, list) else node

    figure = go.Figure(data=coloured(list(drawing.data)), layout=coloured(drawing.layout))
    assert len(figure.data) == len(drawing.data)
    assert {trace.type for trace in figure.data} == {"scatter"}  # never scattergl: it needs unsafe-eval


def test_the_drawn_load_keeps_its_extremes_and_its_points() -> None:
    trace = pin_load_figure(loads()).data[0]
    assert len(trace["y"]) == len(trace["x"]) == 361
    assert max(trace["y"]) == pytest.approx(80.0)  # hand: 100 - 20 kN
    assert min(trace["y"]) == pytest.approx(-120.0)  # hand


def test_a_reversal_past_dead_centre_is_shaded_in_two_pieces() -> None:
    shapes = [s for s in pin_load_figure(loads()).layout["shapes"] if s["type"] == "rect"]
    assert [(s["x0"], s["x1"]) for s in shapes] == [(281.5, 360.0), (0.0, 78.5)]


def test_limits_are_drawn_on_their_own_side() -> None:
    lines = [s["y0"] for s in pin_load_figure(loads()).layout["shapes"] if s["type"] == "line"]
    assert lines == [0.0, 160.0, -150.0]


def test_no_limit_entered_draws_none() -> None:
    drawing = pin_load_figure(loads(tension_limit_n=None, compression_limit_n=None))
    assert [s["y0"] for s in drawing.layout["shapes"] if s["type"] == "line"] == [0.0]
    assert not [a for a in drawing.layout["annotations"] if "limit" in a["text"]]


def test_the_words_say_what_the_chart_shows() -> None:
    words = pin_load_figure(loads()).words
    assert "120.0 kN compression at 180°" in words
    assert "80.0 kN tension at 0°" in words
    assert "does not reverse" in pin_load_figure(loads(reversal_deg=[])).words


def test_a_card_is_in_gauge_pressure_and_litres() -> None:
    drawing = pv_figure(end(), highest_volume_m3=4e-3, barometer_pa=1e5)
    (trace,) = drawing.data
    assert max(trace["y"]) == pytest.approx(39.0)  # hand: 40 bar absolute less 1 bar
    assert max(trace["x"]) == pytest.approx(3.5)  # hand: 2 + 1.5 L
    assert "suction 20.00 and discharge 38.00 barg" in drawing.words


def test_a_held_open_end_is_said() -> None:
    drawing = pv_figure(end(held_open=True), highest_volume_m3=4e-3, barometer_pa=1e5)
    assert "held open" in drawing.words


@pytest.mark.parametrize(("value", "expected"), [(0.0, 1.0), (9.9, 10.0), (10.1, 12.5), (431.0, 450.0)])
def test_an_axis_ends_at_a_round_number(value: float, expected: float) -> None:
    assert ceiling(value) == pytest.approx(expected)  # hand
