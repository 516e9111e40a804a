"""One scorer for all stories: what a watcher said, held against the sealed truth.

It takes the events of a journal and knows nothing of how they came about.
"""

from collections.abc import Collection, Sequence
from dataclasses import dataclass
from enum import StrEnum
from typing import Final

from agent.records import AlarmEvent, EventKind
from simulator.truth import Expected, Need, Truth

TICK_S: Final = 1.0  # a watcher that looks once a second may name the second in which it began


class Verdict(StrEnum):
    FOUND = "found"
    LATE = "late"
    OUT_OF_ORDER = "out of order"
    MISSED = "missed"
    NOT_IN_REACH = "not yet in reach"
    RUN_TOO_SHORT = "run too short"
    FORBIDDEN = "forbidden alarm"
    EXTRA = "extra alarm"


FAILURES: Final = frozenset(
    {Verdict.LATE, Verdict.OUT_OF_ORDER, Verdict.MISSED, Verdict.RUN_TOO_SHORT, Verdict.FORBIDDEN}
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Run:
    """When and how a story was told; instants are UTC [s]."""

    began_s: float
    ended_s: float
    pace: float = 1.0
    least_s: float = 0.0  # how long silence must have been kept before it counts

    def onset_s(self, expected: Expected) -> float:
        return self.began_s + expected.real_s(self.pace)

    def due_s(self, expected: Expected) -> float:
        return self.onset_s(expected) + expected.latest_real_s(self.pace)


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """One verdict."""

    verdict: Verdict
    what: str
    unit: str
    subject: str
    after_s: float | None  # real seconds after the onset, for an alarm nobody expected after the beginning
    allowed_s: float | None
    why: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Score:
    """What one run of one story came to."""

    story: str
    lines: tuple[Line, ...]

    @property
    def failed(self) -> bool:
        return any(line.verdict in FAILURES for line in self.lines)

    @property
    def words(self) -> str:
        if self.failed:
            return "FAILED"
        if any(line.verdict is Verdict.NOT_IN_REACH for line in self.lines):
            return Verdict.NOT_IN_REACH.value
        return "passed"

    def of(self, verdict: Verdict) -> tuple[Line, ...]:
        return tuple(line for line in self.lines if line.verdict is verdict)


def score(truth: Truth, events: Sequence[AlarmEvent], run: Run, *, in_reach: Collection[Need] = ()) -> Score:
    """Judge one run.

    Parameters
    ----------
    truth : Truth
        Of the story that was told.
    events : Sequence[AlarmEvent]
        The journal, oldest first. Only what was raised counts.
    run : Run
        When and how it was told.
    in_reach : Collection[Need]
        What the watcher claims to be able to do; what it cannot is not held against it.

    Returns
    -------
    Score
        A line for each thing expected, then a line for each other alarm.
    """
    raised = [e for e in events if e.kind is EventKind.RAISED and e.tick <= run.ended_s]
    matches = {i: _match(x, raised, run) for i, x in enumerate(truth.expected_first)}
    lines = [_judge(truth, i, matches, run, in_reach) for i in matches]
    matched = {id(e) for e in matches.values() if e is not None}
    lines += [_unasked(truth, e, run) for e in raised if id(e) not in matched]
    if not truth.expected_first and run.ended_s - run.began_s < run.least_s:
        lines.append(_too_short(run))
    return Score(story=truth.story, lines=tuple(lines))


def _match(expected: Expected, raised: Sequence[AlarmEvent], run: Run) -> AlarmEvent | None:
    onset_s = run.onset_s(expected)
    return next((e for e in raised if _names(expected, e) and e.tick >= onset_s - TICK_S), None)


def _names(expected: Expected, event: AlarmEvent) -> bool:
    return (
        event.alarm == expected.key
        and expected.unit in ("*", event.unit)
        and (not expected.subject or event.subject in expected.subject)
    )


def _judge(
    truth: Truth,
    place: int,
    matches: dict[int, AlarmEvent | None],
    run: Run,
    in_reach: Collection[Need],
) -> Line:
    expected, event = truth.expected_first[place], matches[place]
    why = ""
    if event is not None:
        earlier = [
            (x, matches[i])
            for i, x in enumerate(truth.expected_first[:place])
            if x.unit == expected.unit and x.needs is None and expected.needs is None
        ]
        behind = next((x for x, e in earlier if e is None or e.tick > event.tick), None)
        if event.tick > run.due_s(expected) + TICK_S:
            verdict = Verdict.LATE
        elif behind is not None:
            verdict, why = Verdict.OUT_OF_ORDER, f"{behind.key} should have come before it"
        else:
            verdict = Verdict.FOUND
    elif expected.needs is not None and expected.needs not in in_reach:
        verdict, why = Verdict.NOT_IN_REACH, f"needs {expected.needs}"
    elif run.ended_s < run.due_s(expected):
        verdict, why = Verdict.RUN_TOO_SHORT, "the time allowed was not over"
    else:
        verdict = Verdict.MISSED
    return Line(
        verdict=verdict, what=expected.key, unit=expected.unit,
        subject=event.subject if event is not None else " or ".join(expected.subject),
        after_s=None if event is None else event.tick - run.onset_s(expected),
        allowed_s=run.due_s(expected) - run.onset_s(expected), why=why,
    )  # fmt: skip


def _unasked(truth: Truth, event: AlarmEvent, run: Run) -> Line:
    """An alarm nobody asked for: forbidden, unless it repeats what was expected or follows from the story."""
    early = [x for x in truth.expected_first if _names(x, event) and event.tick < run.onset_s(x) - TICK_S]
    known = not early and any(_names(x, event) for x in truth.expected_first)
    tolerated = any(p.fits(event.unit, event.alarm) for p in truth.may)
    forbidden = any(p.fits(event.unit, event.alarm) for p in truth.must_not)
    verdict = Verdict.EXTRA
    if early or (forbidden and not known and not tolerated):
        verdict = Verdict.FORBIDDEN
    return Line(
        verdict=verdict, what=event.alarm, unit=event.unit, subject=event.subject,
        after_s=event.tick - run.began_s, allowed_s=None,
        why="before anything of it happened" if early else "",
    )  # fmt: skip


def _too_short(run: Run) -> Line:
    return Line(
        verdict=Verdict.RUN_TOO_SHORT, what="silence", unit="*", subject="",
        after_s=run.ended_s - run.began_s, allowed_s=run.least_s, why="kept for too short a time to count",
    )  # fmt: skip


_HEAD: Final = ("story", "verdict", "what", "unit", "where", "after", "allowed", "")


def table(scores: Sequence[Score]) -> str:
    """All scores as text, a line a verdict; a story without any line was told and heard in silence."""
    rows: list[tuple[str, ...]] = [_HEAD]
    for one in scores:
        rows.append((one.story, one.words, "", "", "", "", "", "" if one.lines else "silence"))
        rows += [
            ("", x.verdict, x.what, x.unit, x.subject, _time(x.after_s), _time(x.allowed_s), x.why)
            for x in one.lines
        ]
    widths = [max(len(row[k]) for row in rows) for k in range(len(_HEAD))]
    return "\n".join("  ".join(c.ljust(w) for c, w in zip(r, widths, strict=True)).rstrip() for r in rows)


def _time(seconds: float | None) -> str:
    """Seconds as a person would say them."""
    if seconds is None:
        return ""
    for size, unit in ((172_800.0, "d"), (7_200.0, "h"), (600.0, "min")):
        if abs(seconds) >= size:
            return f"{seconds / {'d': 86_400.0, 'h': 3_600.0, 'min': 60.0}[unit]:.1f} {unit}"
    return f"{seconds:.0f} s"
