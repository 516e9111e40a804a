"""Layouts, the guide, and what no page may say."""

import json
import re
from importlib.resources import files

import pytest
from flask.testing import FlaskClient

from agent.alarms.catalogue import CATALOGUE
from dashboard.app import content_of
from dashboard.pages import guide
from dashboard.pages.frame import ADVISORY, frame
from dashboard.pages.markdown import render
from tests.dashboard.written_store import site

PATHS = ("/", "/unit/K-110", "/unit/K-220", "/alarms", "/guide", "/no/such/page", "/unit/K-999")


def text_of(path: str) -> str:
    page = frame(site(), path, content_of(site(), path))
    return json.dumps(page.to_plotly_json(), default=lambda c: c.to_plotly_json(), ensure_ascii=False)


@pytest.mark.parametrize("path", PATHS)
def test_every_page_says_that_it_is_advisory_and_that_the_plant_is_invented(path: str) -> None:
    text = text_of(path)
    assert ADVISORY in text
    assert "Invented plant" in text
    assert '"data-page"' in text


def test_a_page_that_is_not_there_says_so() -> None:
    assert "No such page" in text_of("/unit/K-999")
    assert "No such page" not in text_of("/unit/K-110")


@pytest.mark.parametrize("name", ["", *guide.names()])
def test_every_chapter_of_the_guide_opens(name: str) -> None:
    assert "No such page" not in text_of(f"/guide/{name}")


def test_the_guide_lists_every_alarm_in_the_words_of_the_catalogue() -> None:
    text = guide.alarm_text()
    for kind in CATALOGUE.values():
        assert kind.words in text
        assert kind.action in text
        assert kind.consequence in text


def test_a_stage_table_runs_as_the_gas_flows() -> None:
    text = text_of("/unit/K-220")
    places = [text.index(f'"Stage {n}"') for n in (1, 2, 3)]
    assert places == sorted(places)
    assert "K-220/stage3.expected_discharge_temperature.u" in text


def test_an_input_that_the_unit_does_not_have_is_said() -> None:
    """K-220 has no speed transmitter."""
    assert "not measured" in text_of("/unit/K-220")
    assert "not measured" not in text_of("/unit/K-110")


def test_the_index_has_a_language_and_no_outside_address(client: FlaskClient) -> None:
    index = client.get("/").get_data(as_text=True)
    assert '<html lang="en">' in index
    outside = [a for a in re.findall(r"(?:src|href)=\"([^\"]+)\"", index) if not a.startswith("/")]
    assert outside == []
    assert not re.search(r"<script(?![^>]*(src=|application/json|_dash-renderer))", index)


def test_words_that_claim_too_much_stand_nowhere() -> None:
    claims = re.compile(r"\b(safe|safely|OK to run|healthy machine)\b", re.IGNORECASE)
    own = [*(files("dashboard") / "assets").iterdir(), *(files("dashboard") / "guide").iterdir()]
    texts = {f.name: f.read_text(encoding="utf-8") for f in own if not f.name.endswith(".png")}
    texts |= {p: text_of(p) for p in PATHS}
    found = {name: claims.findall(text) for name, text in texts.items()}
    assert {name: words for name, words in found.items() if words} == {}


def test_markdown_becomes_elements_and_never_html() -> None:
    blocks = render(
        "# Head\n\nA **bold** word, `code` and [a page](/guide).\n\n- one\n  more\n- two\n\n"
        "| a | b |\n|---|---|\n| 1 | <script>x</script> |\n\n[out](https://example.invalid)"
    )
    assert [type(b).__name__ for b in blocks] == ["H1", "P", "Ul", "Table", "P"]
    paragraph = blocks[1].children
    assert [type(c).__name__ for c in paragraph] == ["str", "Strong", "str", "Code", "str", "A", "str"]
    assert [i.children for i in blocks[2].children] == [["one more"], ["two"]]
    (body,) = [c for c in blocks[3].children if type(c).__name__ == "Tbody"]
    assert body.children[0].children[1].children == ["<script>x</script>"]  # text, not a script
    assert type(blocks[4].children[0]).__name__ == "Span"  # no link leads outside
