"""Unit: is this machine doing the work it should?"""

from collections.abc import Callable
from typing import Any, Final

from dash import dcc, html
from dash.development.base_component import Component

from agent.siteplan.plan import UnitPlan
from dashboard.figures.look import axis
from dashboard.figures.look import layout as chart_layout
from dashboard.pages.frame import attributes, live_span, page
from dashboard.wording import subject_words, unit_of
from model.machine import Stage
from model.quantities import QUANTITIES, UNCERTAINTY_SUFFIX, Kind, Scope, series_name

# Rows of the stage table, as a person reads them: what the gas does, then how well.
_STAGE_ROWS: Final = (
    ("suction_pressure", "Suction pressure"),
    ("suction_temperature", "Suction temperature"),
    ("discharge_pressure", "Discharge pressure"),
    ("stage_ratio", "Pressure ratio"),
    ("discharge_temperature", "Discharge temperature, measured"),
    ("expected_discharge_temperature", "expected"),
    ("discharge_temperature_residual", "measured less expected"),
    ("isentropic_discharge_temperature", "isentropic"),
    ("measured_volumetric_efficiency", "Volumetric efficiency, from measured flow"),
    ("volumetric_efficiency", "expected"),
    ("stage_capacity", "Capacity, expected"),
    ("stage_power", "Indicated power, expected"),
)
_INDENTED: Final = frozenset({"expected", "measured less expected", "isentropic"})
_UNIT_ROWS: Final = (
    ("speed", "Speed"),
    ("flow", "Flow, measured"),
    ("capacity", "expected"),
    ("capacity_residual", "measured less expected"),
    ("mass_flow", "Mass flow, expected"),
    ("electrical_power", "Electrical power, measured"),
    ("power", "Indicated power, expected"),
)
_CHARTS: Final = (
    ("pv-head", "Head end, pressure over volume"),
    ("pv-crank", "Crank end, pressure over volume"),
    ("pin-load", "Load at the crosshead pin over crank angle"),
)


def layout(plan: UnitPlan) -> Component:
    unit = plan.unit
    return page(
        "unit",
        unit.id,
        [
            html.Div(
                [
                    html.H1([html.Span(unit.id, className="unit-id"), f" {unit.name}"]),
                    html.Span(unit.service, className="quiet"),
                    _words_of("State", "state"),
                    _words_of("Load step", "step"),
                ],
                className="page-head",
            ),
            html.Div([_work(plan), _margins()], className="columns"),
            _curves(plan),
            html.Div([_alarms(), _inputs(), _every_margin(plan)], className="columns thirds"),
        ],
        unit=unit.id,
    )


def _words_of(words: str, part: str) -> Component:
    return html.Span(
        [html.Small(words), html.Span("", **attributes(data_unit_part=part))], className="key-word"
    )


def _work(plan: UnitPlan) -> Component:
    return html.Section(
        [
            html.H2("Stages, as the gas flows"),
            _scroll(_stage_table(plan, plan.unit.stages), "Stages"),
            html.H3("Whole unit"),
            html.Div(
                [_unit_table(plan, rows) for rows in (_UNIT_ROWS[:4], _UNIT_ROWS[4:])], className="pair"
            ),
            _footnotes(),
        ],
        className="card",
        **attributes(data_footnoted="yes"),
    )


def _footnotes() -> Component:
    return html.P("", className="footnotes", **attributes(data_footnotes="yes"))


def _stage_table(plan: UnitPlan, stages: tuple[Stage, ...]) -> Component:
    heads = [
        html.Th(
            [
                html.Span("→ " if i else "", className="arrow", **attributes(aria_hidden="true")),
                f"Stage {s.number}",
            ],
            scope="col",
        )
        for i, s in enumerate(stages)
    ]
    rows = [_row(plan, key, words, [s.subject for s in stages]) for key, words in _STAGE_ROWS]
    return html.Table(
        [html.Thead(html.Tr([html.Th("", scope="col"), html.Th("", scope="col"), *heads])), html.Tbody(rows)],
        className="numbers",
        **attributes(aria_label="Stages"),
    )


def _unit_table(plan: UnitPlan, rows: tuple[tuple[str, str], ...]) -> Component:
    return html.Table(
        html.Tbody([_row(plan, key, words, ["unit"]) for key, words in rows]),
        className="numbers",
        **attributes(aria_label="Whole unit"),
    )


def _row(plan: UnitPlan, key: str, words: str, subjects: list[str]) -> Component:
    quantity = QUANTITIES[key]
    head = html.Th(words, scope="row", className="indented" if words in _INDENTED else "")
    return html.Tr(
        [head, html.Td(unit_of(quantity), className="unit"), *(_cell(plan, s, key) for s in subjects)]
    )


def _cell(plan: UnitPlan, subject: str, key: str) -> Component:
    name = series_name(subject, key)
    entry = plan.input(name)
    if entry is None and QUANTITIES[key].kind is Kind.MEASURED:
        return html.Td("not measured", className="numeric quiet")
    # An empty band keeps its place, so that the numbers of a column stand below each other.
    has_band = QUANTITIES[key].has_uncertainty
    band = (
        live_span(name + UNCERTAINTY_SUFFIX, plan.id, "band") if has_band else html.Span("", className="band")
    )
    number = html.A(
        live_span(name, plan.id),
        href=f"/unit/{plan.id}/working/{name}",
        className="worked",
        **attributes(aria_label=f"Working of {QUANTITIES[key].words}, {subject_words(subject)}"),
    )
    children = [number, band]
    more: dict[str, Any] = {"title": f"{entry.tag}, {entry.tap}"} if entry is not None else {}
    return html.Td(children, className="numeric", **more)


def _kinds() -> list[str]:
    return [q.key.removesuffix("_margin") for q in QUANTITIES.values() if q.kind is Kind.MARGIN]


def _margins() -> Component:
    rows = [_margin_row(key) for key in _kinds()]
    return html.Section(
        [
            html.H2("What is left before each limit"),
            html.P(
                "The worst of each kind. The bar is the share left; its heavy edge is the limit.",
                className="quiet",
            ),
            html.Table(
                [
                    html.Thead(
                        html.Tr(
                            [
                                html.Th(t, scope="col")
                                for t in ("Quantity", "Left", "Share left", "Limit and source")
                            ]
                        )
                    ),
                    html.Tbody(rows),
                ],
                className="margin-table",
                **attributes(aria_label="Margins"),
            ),
        ],
        className="card",
    )


def _part(tag: Callable[..., Component], name: str, className: str = "") -> Component:
    return tag("", className=className, **attributes(data_part=name))


def _margin_row(key: str) -> Component:
    words = QUANTITIES[key].words
    return html.Tr(
        [
            html.Th([words[0].upper() + words[1:], _part(html.Small, "where")], scope="row"),
            html.Td(_part(html.Span, "left", "left-text"), className="numeric"),
            html.Td([_part(html.Span, "bar", "bar-place"), _part(html.Small, "now")], className="bar-cell"),
            html.Td([_part(html.Span, "limit"), _part(html.Small, "source")]),
        ],
        **attributes(data_margin=key),
    )


def _curves(plan: UnitPlan) -> Component:
    options = [
        html.Option(f"Cylinder {c.number}, stage {s.number}", value=str(c.number))
        for s in plan.unit.stages
        for c in s.cylinders
    ]
    return html.Section(
        [
            html.Div(
                [
                    html.H2("Curves, by estimate"),
                    html.Label(["Cylinder ", html.Select(options, id="cylinder")], className="choice"),
                    html.Span(["as of ", html.Span("", id="curves-of")], className="quiet"),
                ],
                className="page-head",
            ),
            html.P("", id="curves-blind", className="blind", hidden=True),
            html.Div([_chart(name, words) for name, words in _CHARTS], id="charts", className="charts"),
        ],
        className="card",
    )


def _chart(name: str, words: str) -> Component:
    empty = {"data": [], "layout": chart_layout(axis("", 0, 1), axis("", 0, 1))}
    return html.Figure(
        [
            html.H3(words),
            html.Div(
                dcc.Graph(
                    figure=empty,
                    config={"displayModeBar": False, "responsive": True, "scrollZoom": False},
                    responsive=True,
                    className="chart",
                ),
                id=name,
                role="img",
                **attributes(aria_label=words),
            ),
            html.Figcaption("", id=f"{name}-words"),
        ],
        className=f"chart-card {name}",
    )


def _alarms() -> Component:
    return html.Section(
        [html.H2("Open alarms"), html.Ul([], id="unit-alarms", className="plain")], className="card"
    )


def _inputs() -> Component:
    return html.Section(
        [html.H2("Blind inputs"), html.Ul([], id="blind-inputs", className="plain")], className="card"
    )


def _every_margin(plan: UnitPlan) -> Component:
    tables = []
    for scope, subjects in (
        (Scope.STAGE, [s.subject for s in plan.unit.stages]),
        (Scope.CYLINDER, [c.subject for c in plan.unit.cylinders]),
    ):
        kinds = [q for q in QUANTITIES.values() if q.kind is Kind.MARGIN and q.scope is scope]
        heads = [html.Th(subject_words(s).capitalize(), scope="col") for s in subjects]
        rows = [
            html.Tr(
                [
                    html.Th(q.words, scope="row"),
                    html.Td(unit_of(q), className="unit"),
                    *(
                        html.Td(live_span(series_name(s, q.key), plan.id), className="numeric")
                        for s in subjects
                    ),
                ]
            )
            for q in kinds
        ]
        tables.append(
            html.Table(
                [
                    html.Thead(html.Tr([html.Th("", scope="col"), html.Th("", scope="col"), *heads])),
                    html.Tbody(rows),
                ],
                className="numbers",
            )
        )
    return html.Section(
        html.Details(
            [html.Summary("What is left, every stage and cylinder"), _scroll(html.Div(tables), "Margins")]
        ),
        className="card",
        **attributes(data_footnoted="yes"),
    )


def _scroll(child: Component, words: str) -> Component:
    return html.Div(child, className="scroll", tabIndex="0", role="region", **attributes(aria_label=words))
