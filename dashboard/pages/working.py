"""Working: one number of the store with its inputs, formulas and sources, to be checked by hand."""

from collections.abc import Iterable, Iterator
from typing import Final

from dash import html
from dash.development.base_component import Component

from agent.database import StoreError
from agent.explanation import Explainer, Explanation, ExplanationError, value_text
from agent.siteplan.plan import SitePlan
from dashboard.pages.frame import attributes, page
from dashboard.wording import clock

_HOW: Final = (
    "The steps are computed from the text shown, in SI and absolute, and end at the number that the agent"
    " stored. "
)


def layout(site: SitePlan, unit_id: str, name: str, explainer: Explainer, *, now: float) -> Component:
    """The page, made once from the newest stored row: a working is of one second and does not move."""
    try:
        found = explainer.explain(unit_id, name)
    except (ExplanationError, StoreError) as error:
        head = [html.H1([html.Span(unit_id, className="unit-id"), " Working"]), html.P(str(error))]
        return page("working", "Working", [*head, _back(unit_id)])
    when = clock(found.tick, site.zone, now=now)
    return page(
        "working",
        f"{unit_id} working",
        [
            html.Div(
                [
                    html.H1([html.Span(unit_id, className="unit-id"), f" {found.words}"]),
                    html.Span(found.shown, className="worked-value"),
                    html.Span(f"at {when}, by estimate", className="quiet"),
                ],
                className="page-head",
            ),
            html.P(
                [
                    _HOW,
                    html.A("Take the newest second", href=f"/unit/{unit_id}/working/{name}"),
                ],
                className="quiet",
            ),
            _card("Given", ("Symbol", "What", "Value", "From"), _givens(found)),
            _card("Steps", ("Symbol", "What", "Formula", "Value", "Source"), _steps(found)),
            _card("Standard uncertainty, by share", ("From", "Share", "Alone, SI"), _shares(found)),
            _card("Functions", ("Name", "What it is"), found.working.functions.items()),
            _back(unit_id),
        ],
    )


def _givens(found: Explanation) -> Iterator[tuple[str, ...]]:
    for line in found.working.givens:
        yield line.symbol, line.words, value_text(line.value, line.unit), found.origin(line)


def _steps(found: Explanation) -> Iterator[tuple[str, ...]]:
    for step in found.working.steps:
        yield step.symbol, step.words, step.expression, value_text(step.value, step.unit), step.source


def _shares(found: Explanation) -> Iterator[tuple[str, ...]]:
    for share in found.shares:
        yield found.source(share), f"{100 * share.share:.1f} %", f"{share.standard:.3g}"


def _card(title: str, heads: tuple[str, ...], rows: Iterable[tuple[str, ...]]) -> Component:
    body = [html.Tr([_cell(h, t) for h, t in zip(heads, row, strict=True)]) for row in rows]
    if not body:
        return html.Div()
    table = html.Table(
        [html.Thead(html.Tr([html.Th(h, scope="col") for h in heads])), html.Tbody(body)],
        className="working",
        **attributes(aria_label=title),
    )
    return html.Section(
        [
            html.H2(title),
            html.Div(table, className="scroll", tabIndex="0", role="region", **attributes(aria_label=title)),
        ],
        className="card",
    )


def _cell(head: str, text: str) -> Component:
    inside = html.Code(text) if head in {"Symbol", "Formula", "Name"} else text
    return html.Td(inside, className="numeric" if head in {"Value", "Share", "Alone, SI"} else "")


def _back(unit_id: str) -> Component:
    return html.P(html.A(f"Back to {unit_id}", href=f"/unit/{unit_id}"))
