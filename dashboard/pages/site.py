"""Site: what is worst now, and where am I blind?"""

from typing import Final

from dash import dcc, html
from dash.development.base_component import Component

from dashboard.pages.frame import attributes, page

TITLE: Final = "Site"
_COLUMNS: Final = (
    ("Unit", ""),
    ("State", ""),
    ("Load step", ""),
    ("Smallest margin", "what is left before the limit"),
    ("Share left", "of the span from rest to the limit"),
    ("Over time", "share left"),
    ("Open alarms", ""),
    ("Blind inputs", "no usable reading"),
)
_SOURCE_COLUMNS: Final = (
    ("Source", ""), ("Link", ""), ("Readings", "since the agent started"),
    ("Rejected payloads", "last reason"),
    ("Dropped readings", "queue full"), ("Clock", "agent less source"),
)  # fmt: skip


def _head(columns: tuple[tuple[str, str], ...]) -> Component:
    cells = [html.Th([words, *([html.Small(note)] if note else [])], scope="col") for words, note in columns]
    return html.Thead(html.Tr(cells))


def layout() -> Component:
    return page(
        "site",
        TITLE,
        [
            html.Div(
                [
                    html.H1("Units"),
                    dcc.Checklist(
                        id="plant-order",
                        options=[{"label": "Plant order", "value": "plant"}],
                        value=[],
                        className="choice",
                    ),
                ],
                className="page-head",
            ),
            html.Div(
                html.Table(
                    [_head(_COLUMNS), html.Tbody(id="site-rows")],
                    className="site-table",
                    **attributes(aria_label="Units"),
                ),
                className="scroll",
                tabIndex="0",
                role="region",
                **attributes(aria_label="Units"),
            ),
            html.H2("Sources"),
            html.Div(
                html.Table(
                    [_head(_SOURCE_COLUMNS), html.Tbody(id="source-rows")],
                    className="source-table",
                    **attributes(aria_label="Sources"),
                ),
                className="scroll",
                tabIndex="0",
                role="region",
                **attributes(aria_label="Sources"),
            ),
            html.P(id="source-none", className="quiet"),
        ],
    )
