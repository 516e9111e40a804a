"""The working of a stored number, on its page and on the command line."""

import json
from pathlib import Path

import pytest
from typer.testing import CliRunner

from agent.cli import app as command
from agent.database import SERIES_FILE
from agent.explanation import Explainer, ExplanationError
from agent.records import Quality
from agent.storage.sqlite_series import SeriesReader
from dashboard.pages import working
from model.quantities import Kind, split_series
from tests.dashboard.conftest import NOON
from tests.dashboard.written_store import SITE_FILE, WrittenStore, site


def explainer(store: WrittenStore) -> Explainer:
    return Explainer(site(), SeriesReader(store.data / SERIES_FILE), store.data)


def text_of(store: WrittenStore, unit: str, name: str) -> str:
    found = working.layout(site(), unit, name, explainer(store), now=NOON + 0.5)
    return json.dumps(found.to_plotly_json(), default=lambda c: c.to_plotly_json(), ensure_ascii=False)


@pytest.mark.parametrize(
    "unit",
    ["K-110", pytest.param("K-220", marks=pytest.mark.slow), pytest.param("K-330", marks=pytest.mark.slow)],
)
def test_the_working_ends_at_the_stored_number(store: WrittenStore, unit: str) -> None:
    rows = store.ticks(NOON, 2)
    asked = explainer(store)
    for plan in (site().unit(unit),):
        for name, value, quality in zip(
            plan.result_names(), rows[plan.id].values, rows[plan.id].quality, strict=True
        ):
            if quality != Quality.GOOD or name.endswith((".u", ".p")) or name == "unit.run_state":
                continue
            found = asked.explain(plan.id, name)
            assert found.tick == NOON + 1
            # rows are single precision, and so are the inputs that the working starts from
            quantity = split_series(name)[1]
            nought = 1e-3 if quantity.kind is Kind.MARGIN else 1e-4
            scale = max(
                abs(float(value)), abs(max(float(s.value) for s in found.working.steps if not s.value.ndim))
            )
            assert float(found.working.value) == pytest.approx(float(value), abs=nought * scale), name
            assert found.published == pytest.approx(float(value))


def test_shares_of_the_uncertainty_sum_to_one_and_name_their_tags(store: WrittenStore) -> None:
    store.ticks(NOON, 1)
    found = explainer(store).explain("K-110", "stage1.expected_discharge_temperature")
    assert sum(share.share for share in found.shares) == pytest.approx(1.0)
    sources = [found.source(share) for share in found.shares]
    assert any(source.startswith("TT-1101, suction temperature") for source in sources)
    assert any(source.startswith("model: ") for source in sources)
    assert explainer(store).explain("K-110", "unit.speed").shares == ()


def test_page_shows_tag_formula_source_and_time(store: WrittenStore) -> None:
    store.ticks(NOON, 1)
    text = text_of(store, "K-220", "stage2.expected_discharge_temperature")
    for part in (
        "PT-2203",
        "T_of_h(h_s + W*(1 - q_w)/F, p_d)",
        "R. Joel",
        "by estimate",
        "nameplate",
        "by share",
    ):
        assert part in text


@pytest.mark.parametrize(
    ("unit", "name", "words"),
    [
        ("K-110", "stage_ratio", "Near it: stage1.stage_ratio"),
        ("K-110", "stage7.stage_ratio", "has no series"),
        ("K-110", "unit.run_state", "is a state"),
    ],
)
def test_what_has_no_working_is_said(store: WrittenStore, unit: str, name: str, words: str) -> None:
    store.ticks(NOON, 1)
    assert words in text_of(store, unit, name)


def test_a_blind_number_says_why(store: WrittenStore) -> None:
    store.ticks(NOON, 1, lost={("K-110", "stage1.suction_pressure"): Quality.BAD})
    with pytest.raises(ExplanationError, match="not evaluated at that time"):
        explainer(store).explain("K-110", "stage1.stage_ratio")


def test_an_empty_store_is_said(tmp_path: Path) -> None:
    nobody = Explainer(site(), SeriesReader(tmp_path / SERIES_FILE), tmp_path)
    found = working.layout(site(), "K-110", "stage1.stage_ratio", nobody, now=NOON)
    assert "series.db" in str(found)


def test_command_prints_the_working(store: WrittenStore) -> None:
    store.ticks(NOON, 3)
    base = ["explain", str(SITE_FILE), "K-110", "cylinder1.gas_load_compression", "--data", str(store.data)]
    done = CliRunner().invoke(command, base)
    assert done.exit_code == 0, done.output
    assert "gas load, compression, cylinder 1:" in done.output
    assert "p_C1gasc*A_1C" in done.output.replace("\n", "")
    assert "PT-1101" in done.output
    past = CliRunner().invoke(command, [*base, "--at", "2026-09-21T14:13:21+00:00"])
    assert past.exit_code == 0, past.output  # NOON + 1
    for at, words in (("2020-01-01T00:00:00", "holds no row"), ("yesterday", "no ISO 8601 time")):
        refused = CliRunner().invoke(command, [*base, "--at", at])
        assert refused.exit_code == 1
        assert words in refused.output
