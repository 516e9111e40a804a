"""Guide: what the pages say and what they cannot say. The list of alarms comes from the catalogue itself."""

import re
from importlib.resources import files
from typing import Final

from dash import html
from dash.development.base_component import Component

from agent.alarms.catalogue import CATALOGUE, AlarmType
from dashboard.pages.frame import attributes, here, page
from dashboard.pages.markdown import render

TITLE: Final = "Guide"
ALARM_LIST: Final = "alarm-list"
_FIRST: Final = "index"


def _folder() -> dict[str, str]:
    """Name of each chapter, in reading order, and its file."""
    found = {}
    for file in sorted((files("dashboard") / "guide").iterdir(), key=lambda f: f.name):
        if file.name.endswith(".md"):
            found[re.sub(r"^\d+-", "", file.name.removesuffix(".md"))] = file.name
    return found


def names() -> tuple[str, ...]:
    return (*_folder(), ALARM_LIST)


def layout(name: str) -> Component:
    chapters = _folder()
    name = name or _FIRST
    if name == ALARM_LIST:
        body = render(alarm_text())
    else:
        body = render((files("dashboard") / "guide" / chapters[name]).read_text(encoding="utf-8"))
    return page("guide", TITLE, [_contents(chapters, name), html.Article(body)])


def _contents(chapters: dict[str, str], chosen: str) -> Component:
    titles = {name: _title(file) for name, file in chapters.items()} | {ALARM_LIST: "Alarms, one by one"}
    items = [
        html.Li(html.A(title, href=f"/guide/{name}", **here(name == chosen)))
        for name, title in titles.items()
    ]
    return html.Nav(html.Ul(items, className="plain contents"), **attributes(aria_label="Chapters"))


def _title(file: str) -> str:
    first = (files("dashboard") / "guide" / file).read_text(encoding="utf-8").partition("\n")[0]
    return first.removeprefix("# ")


def alarm_text() -> str:
    """Every alarm of the catalogue, in its own words."""
    blocks = ["# Alarms, one by one", "Made from the same catalogue that the agent judges by."]
    for kind in CATALOGUE.values():
        blocks += [f"## {kind.words}", _facts(kind), f"**What to do.** {kind.action}"]
        blocks += [f"**If nothing is done.** {kind.consequence}", f"**Why it exists.** {kind.rationale}"]
    return "\n\n".join(blocks)


def _facts(kind: AlarmType) -> str:
    return (
        "| Priority | Raised when | On-delay | Off-delay | Time to respond | For |\n"
        "|---|---|---|---|---|---|\n"
        f"| {kind.priority.words} | {kind.rule.value} | {kind.on_delay_s:g} s | {kind.off_delay_s:g} s "
        f"| {kind.time_to_respond} | {kind.owner} |"
    )
