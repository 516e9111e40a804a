"""What every page has: the header, the marks, the content, the foot."""

from collections.abc import Sequence
from typing import Any, Final

from dash import html
from dash.development.base_component import Component

from agent.siteplan.plan import SitePlan

ADVISORY: Final = (
    "Advisory only. Not a protective or safety function; it writes nothing to any machine. The plant's "
    "alarms, trips, procedures, local codes and the maker's limits come first."
)
INVENTED: Final = "Invented plant"


def attributes(**words: str) -> dict[str, Any]:
    """Attributes whose names hold a dash, which Python's words cannot: ``data_live`` for ``data-live``."""
    return {name.replace("_", "-"): value for name, value in words.items()}


def here(is_here: bool) -> dict[str, Any]:
    return attributes(aria_current="page") if is_here else {}


def live_span(series: str, unit: str, className: str = "live") -> Component:
    return html.Span(className=className, **attributes(data_live=f"{unit}/{series}"))


def page(name: str, title: str, children: Sequence[Component], **data: str) -> Component:
    """The body of one page; the scripts find it by ``data-page``."""
    marks = {f"data_{key}": value for key, value in data.items()}
    return html.Div(
        list(children), className=f"page page-{name}", **attributes(data_page=name, data_title=title, **marks)
    )


def frame(site: SitePlan, path: str, content: Component) -> Component:
    return html.Div(
        [
            html.A("Skip to the content", href="#content", className="skip"),
            _header(site, path),
            html.Div(id="stale-banner", className="stale-banner", role="alert", hidden=True),
            html.Div(id="agent-note", className="agent-note", role="status", hidden=True),
            html.Main(content, id="content", tabIndex="-1"),
            html.Footer(ADVISORY, className="foot"),
        ],
        className="frame invented" if site.simulated else "frame",
        **attributes(data_site=site.name),
    )


def _header(site: SitePlan, path: str) -> Component:
    pages = [
        ("Site", "/"),
        *((p.id, f"/unit/{p.id}") for p in site.units),
        ("Alarms", "/alarms"),
        ("Guide", "/guide"),
    ]
    links = [
        html.Li(html.A(words, href=address, **here(_is_here(address, path)))) for words, address in pages
    ]
    mark = [html.Span(INVENTED, className="invented-mark")] if site.simulated else []
    return html.Header(
        [
            html.Span([html.Span(site.name, className="site-name"), *mark], className="site-block"),
            html.Nav(html.Ul(links), **attributes(aria_label="Pages")),
            html.A(
                id="alarm-counts",
                className="alarm-counts",
                href="/alarms",
                **attributes(aria_label="Open alarms"),
            ),
            html.Span("no data yet", id="data-age", className="data-age", **attributes(data_role="age")),
        ],
        className="head",
    )


def _is_here(address: str, path: str) -> bool:
    return path == address or (address == "/guide" and path.startswith("/guide/"))
