"""What ``throwline explain UNIT QUANTITY`` prints: a number of the store with its working."""

from collections.abc import Iterator
from datetime import datetime
from pathlib import Path

from rich.console import Console, Group, RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from agent.database import SERIES_FILE, StoreError
from agent.explanation import Explainer, Explanation, ExplanationError, value_text
from agent.siteplan.plan import SitePlan
from agent.storage.sqlite_series import SeriesReader


def explain(
    site: SitePlan, data: Path, unit: str, quantity: str, *, at: str | None, console: Console | None = None
) -> int:
    """Print the working of a stored number.

    Parameters
    ----------
    site : SitePlan
        The site.
    data : Path
        Folder of the databases.
    unit : str
        Which unit.
    quantity : str
        Series name, such as ``stage1.stage_ratio``.
    at : str, optional
        ISO 8601 time, site time where it names no zone; the newest row if none is given.
    console : rich.console.Console, optional
        Where to print; standard output if none is given.

    Returns
    -------
    int
        Exit code: 0 if there is a working, 1 if not.
    """
    out = console or Console(highlight=False)
    reader = SeriesReader(data / SERIES_FILE)
    try:
        found = Explainer(site, reader, data).explain(unit, quantity, _tick(at, site))
    except (ExplanationError, StoreError) as error:
        out.print(f"throwline explain: {error}", markup=False, highlight=False, soft_wrap=True)
        return 1
    finally:
        reader.close()
    out.print(describe(found))
    return 0


def describe(found: Explanation) -> RenderableType:
    """The working as tables."""
    return Group(*_parts(found))


def _parts(found: Explanation) -> Iterator[RenderableType]:
    when = datetime.fromtimestamp(found.tick, found.site.zone)
    yield Text(f"{found.plan.id}  {found.words}: {found.shown}", style="bold")
    yield Text(f"{found.name} at {when:%Y-%m-%d %H:%M:%S} site time. By estimate; advisory only.")
    if found.site.simulated:
        yield Text("Invented plant: the inputs are simulated.")
    given = _table("Given", "symbol", "what", "value", "from")
    for line in found.working.givens:
        given.add_row(line.symbol, line.words, value_text(line.value, line.unit), found.origin(line))
    yield Padding(given, (1, 0, 0, 0))
    steps = _table("Steps", "symbol", "what", "formula and value", "source")
    for step in found.working.steps:
        shown = f"{step.expression}\n= {value_text(step.value, step.unit)}"
        steps.add_row(step.symbol, step.words, shown, step.source)
    yield Padding(steps, (1, 0, 0, 0))
    if found.shares:
        shares = _table("Standard uncertainty, by share", "from", "share", "alone, SI")
        for share in found.shares:
            shares.add_row(found.source(share), f"{100 * share.share:.1f} %", f"{share.standard:.3g}")
        yield Padding(shares, (1, 0, 0, 0))
    if found.working.functions:
        functions = _table("Functions", "name", "what it is")
        for name, words in found.working.functions.items():
            functions.add_row(name, words)
        yield Padding(functions, (1, 0, 0, 0))


def _table(title: str, *columns: str) -> Table:
    table = Table(title=title, title_justify="left", box=None, show_header=True, padding=(0, 2, 0, 0))
    for column in columns:
        table.add_column(Text(column), overflow="fold")
    return table


def _tick(at: str | None, site: SitePlan) -> int | None:
    if at is None:
        return None
    try:
        moment = datetime.fromisoformat(at)
    except ValueError:
        raise ExplanationError(f"--at: {at!r} is no ISO 8601 time such as 2026-12-01T07:30:00.") from None
    return int((moment if moment.tzinfo else moment.replace(tzinfo=site.zone)).timestamp())
