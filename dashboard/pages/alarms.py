"""Alarms: what needs me?"""

from typing import Final

from dash import html
from dash.development.base_component import Component

from dashboard.pages.frame import attributes, page

TITLE: Final = "Alarms"
_JOURNAL: Final = ("Time", "Unit", "Alarm", "What", "Said then", "Who", "Reason")


def layout() -> Component:
    head = html.Thead(html.Tr([html.Th(words, scope="col") for words in _JOURNAL]))
    return page(
        "alarms",
        TITLE,
        [
            html.Div(html.H1("Open alarms"), className="page-head"),
            html.P("", id="alarm-none", className="quiet"),
            html.Ul([], id="alarm-list", className="plain alarm-list"),
            html.H2("Journal"),
            html.P("", id="journal-none", className="quiet"),
            html.Div(
                html.Table(
                    [head, html.Tbody(id="journal-rows")],
                    className="journal",
                    **attributes(aria_label="Journal"),
                ),
                className="scroll",
                tabIndex="0",
                role="region",
                **attributes(aria_label="Journal"),
            ),
        ],
    )
