"""The command ``throwline``: argument parsing only; the work is done in the rooms."""

import asyncio
import os
import sys
from pathlib import Path
from typing import Annotated

# One thread a process: the arrays are small and the tool shares its machine.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import typer

from agent.siteplan.errors import SiteFileError
from agent.siteplan.plan import SitePlan

app = typer.Typer(
    name="throwline",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    help="Watch reciprocating gas compressors from slow plant tags. Advisory only; never writes to a plant.",
)

SiteFile = Annotated[Path, typer.Argument(help="The site file (YAML).", show_default=False)]
DataFolder = Annotated[Path, typer.Option("--data", help="Folder of the two databases.", show_default=False)]
Addresses = Annotated[
    list[str] | None,
    typer.Option("--address", metavar="SOURCE=URL", help="Use another address for a source. Repeatable."),
]


def _pairs(addresses: list[str] | None) -> dict[str, str]:
    pairs = {}
    for text in addresses or ():
        name, equals, url = text.partition("=")
        if not (name and equals and url):
            raise typer.BadParameter(f"{text!r} is not SOURCE=URL", param_hint="--address")
        pairs[name] = url
    return pairs


def _site_or_exit(path: Path, addresses: list[str] | None = None) -> SitePlan:
    from agent.siteplan.load import load_site  # noqa: PLC0415 - keeps `throwline --help` quick

    try:
        return load_site(path, addresses=_pairs(addresses))
    except SiteFileError as error:
        print(error, file=sys.stderr)
        raise typer.Exit(1) from None


@app.command()
def check(site: SiteFile) -> None:
    """Read a site file and say all that is wrong with it, or what it describes."""
    from agent.check_report import report  # noqa: PLC0415

    raise typer.Exit(report(site))


@app.command()
def agent(site: SiteFile, data: DataFolder, address: Addresses = None) -> None:
    """Run the agent: plant tags in, margins and alarms to the store."""
    plan = _site_or_exit(site, address)
    from agent.run import AgentError, run_until_stopped  # noqa: PLC0415

    try:
        asyncio.run(run_until_stopped(plan, data))
    except AgentError as error:
        print(f"throwline agent: {error}", file=sys.stderr)
        raise typer.Exit(1) from None


@app.command()
def dashboard(
    site: SiteFile,
    data: DataFolder,
    port: Annotated[int, typer.Option(help="Port of the pages.", min=1, max=65535)] = 8050,
    host: Annotated[str, typer.Option(help="Address to listen on; loopback only for now.")] = "127.0.0.1",
) -> None:
    """Serve the pages."""
    _site_or_exit(site)
    from dashboard.serve import ServeError, run  # noqa: PLC0415

    try:
        run(site, data, host=host, port=port)
    except ServeError as error:
        print(f"throwline dashboard: {error}", file=sys.stderr)
        raise typer.Exit(1) from None


@app.command()
def explain(
    site: SiteFile,
    unit: Annotated[str, typer.Argument(help="Id of the unit.", show_default=False)],
    quantity: Annotated[str, typer.Argument(help="Series, such as stage1.stage_ratio.", show_default=False)],
    data: DataFolder,
    at: Annotated[str | None, typer.Option(help="ISO 8601; site time if it names no zone.")] = None,
) -> None:
    """Show the working of a stored number: inputs, formulas, each step's value, sources."""
    plan = _site_or_exit(site)
    from agent.explain_report import explain as run  # noqa: PLC0415

    raise typer.Exit(run(plan, data, unit, quantity, at=at))


@app.command()
def plant(
    site: SiteFile,
    address: Addresses = None,
    scenario: Annotated[str, typer.Option(help="Name of a scenario, or a scenario file.")] = "first-light",
    pace: Annotated[float, typer.Option(help="Hurry the story by this factor.", min=0.1, max=60)] = 1.0,
    seed: Annotated[int, typer.Option(help="Seed of the instruments' noise.")] = 1,
) -> None:
    """Serve an invented plant's tags on the wires that the site file names."""
    pairs = _pairs(address)
    from simulator.plant_main import run  # noqa: PLC0415

    raise typer.Exit(run(site, scenario=scenario, addresses=pairs, pace=pace, seed=seed, timetable=True))


@app.command("plant history")
def plant_history(  # noqa: PLR0917 - options
    out: Annotated[Path, typer.Option(help="Folder of the files.", show_default=False)],
    days: Annotated[float, typer.Option(help="How many days.", min=0.001)] = 400.0,
    scenario: Annotated[
        str | None, typer.Option(help="Name of a scenario, or a file; without it ordinary life.")
    ] = None,
    seed: Annotated[int, typer.Option(help="Seed of weather, wander and noise.")] = 1,
    units: Annotated[
        list[str] | None, typer.Option(help="A unit; repeatable. All of the site without it.")
    ] = None,
    start: Annotated[str, typer.Option(metavar="DATE", help="First day, UTC.")] = "2025-01-01",
    site: Annotated[
        Path | None, typer.Option(help="The site file; the invented site without it.", show_default=False)
    ] = None,
    cache: Annotated[Path, typer.Option(help="Folder where tables are kept.")] = Path("data/cache"),
) -> None:
    """Write months of minutes of the invented plant as Parquet and CSV, the sealed truth apart."""
    from simulator.history_main import run  # noqa: PLC0415

    raise typer.Exit(
        run(
            out,
            site=site,
            days=days,
            scenario=scenario,
            seed=seed,
            units=units or (),
            start=start,
            cache=cache,
        )
    )


@app.command()
def demo(
    story: Annotated[str, typer.Option(help="Name of a story; an unknown one lists them.")] = "first-light",
    pace: Annotated[float, typer.Option(help="Hurry the story by this factor.", min=0.1, max=60)] = 1.0,
    port: Annotated[int, typer.Option(help="Port of the pages; a free one is taken if it is in use.")] = 8050,
    keep: Annotated[
        Path | None, typer.Option(help="Keep the data in this folder.", show_default=False)
    ] = None,
) -> None:
    """Start an invented plant, the agent and the pages on this machine, loopback only."""
    from simulator.demo import run  # noqa: PLC0415

    raise typer.Exit(run(story=story, pace=pace, port=port, keep=keep))


def main() -> None:
    """Entry point of the command; ``plant history`` is a command beside ``plant SITE``."""
    words = sys.argv[1:]
    app(["plant history", *words[2:]] if words[:2] == ["plant", "history"] else words)
