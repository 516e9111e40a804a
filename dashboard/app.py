"""The pages: `create_app` makes them; importing this file does nothing."""

import hashlib
from importlib.resources import files
from pathlib import Path
from typing import Final
from urllib.parse import unquote

from dash import Dash, Input, Output, dcc, html
from dash.development.base_component import Component

from agent.clock import Clock, SystemClock
from agent.database import SERIES_FILE
from agent.explanation import Explainer
from agent.siteplan.plan import SitePlan
from agent.storage.sqlite_series import SeriesReader
from dashboard import access, api
from dashboard.curves import CurveBook
from dashboard.live import LiveFeed
from dashboard.pages import alarms, guide, working
from dashboard.pages import site as site_page
from dashboard.pages import unit as unit_page
from dashboard.pages.frame import frame, page
from dashboard.static import CompressedFiles

FEED: Final = "throwline.feed"  # where a server keeps its feed, so that who starts the server can start it

_INDEX: Final = """<!DOCTYPE html>
<html lang="en">
    <head>
        {%metas%}
        <title>{%title%}</title>
        <link rel="icon" href="/assets/mark.svg" type="image/svg+xml">
        {%css%}
    </head>
    <body>
        <noscript>These pages need JavaScript. Use the control system.</noscript>
        {%app_entry%}
        <footer>
            {%config%}
            {%scripts%}
            {%renderer%}
        </footer>
    </body>
</html>"""


def create_app(*, site: SitePlan, data: Path, clock: Clock | None = None) -> Dash:
    """The pages of a site over the databases in ``data``, which need not exist yet.

    The feed polls only once it is started (`feed_of`); until then each request looks for new rows itself.
    """
    clock = clock or SystemClock()
    app = Dash(
        "dashboard",
        assets_folder=str(files("dashboard") / "assets"),
        title=site.name,
        update_title="",
        index_string=_INDEX,
        serve_locally=True,
        compress=False,  # static files are packed once, not on every request
        suppress_callback_exceptions=False,
        add_log_handler=False,
        enable_mcp=False,
        use_pages=False,  # the folder pages/ is ours, routed below
    )
    app.enable_dev_tools(debug=False, dev_tools_disable_version_check=True)
    explainer = Explainer(site, SeriesReader(data / SERIES_FILE), data)
    app.layout = html.Div([dcc.Location(id="address"), html.Div(id="page")])

    @app.callback(Output("page", "children"), Input("address", "pathname"))
    def show(path: str | None) -> Component:
        return frame(site, path or "/", worked(path or "/") or content_of(site, path or "/"))

    def worked(path: str) -> Component | None:
        match [unquote(p) for p in path.split("/") if p]:
            case ["unit", unit_id, "working", name] if unit_id in {p.id for p in site.units}:
                return working.layout(site, unit_id, name, explainer, now=clock.now())
        return None

    feed = LiveFeed(site, data, clock, pages_version=pages_version(site))
    doors = api.Doors(site=site, data=data, clock=clock, feed=feed, curves=CurveBook(site, data))
    access.install(app.server, script_hashes=app.csp_hashes())
    CompressedFiles().install(app.server)
    app.server.register_blueprint(api.blueprint(doors))
    app.server.extensions[FEED] = feed
    return app


def feed_of(app: Dash) -> LiveFeed:
    feed = app.server.extensions[FEED]
    assert isinstance(feed, LiveFeed)
    return feed


def content_of(site: SitePlan, path: str) -> Component:
    """The page of an address that asks nothing of the store."""
    parts = [p for p in path.split("/") if p]
    match parts:
        case []:
            return site_page.layout()
        case ["unit", unit_id] if unit_id in {p.id for p in site.units}:
            return unit_page.layout(site.unit(unit_id))
        case ["alarms"]:
            return alarms.layout()
        case ["guide"]:
            return guide.layout("")
        case ["guide", name] if name in guide.names():
            return guide.layout(name)
        case _:
            return page(
                "missing", "No such page", [html.H1("No such page"), html.P(html.A("To the site", href="/"))]
            )


def pages_version(site: SitePlan) -> str:
    """Changes with the site file and with the pages; a browser that sees it change loads them again."""
    digest = hashlib.sha256(site.digest.encode())
    for part in ("assets", "pages"):
        for file in sorted((files("dashboard") / part).iterdir(), key=lambda f: f.name):
            if file.is_file():
                digest.update(file.read_bytes())
    return digest.hexdigest()[:12]
