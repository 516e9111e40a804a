"""What the tests of the pages share."""

from collections.abc import Iterator
from pathlib import Path

import pytest
from dash import Dash
from flask.testing import FlaskClient

from agent.clock import HandClock
from dashboard.app import create_app, feed_of
from tests.dashboard.written_store import WrittenStore

NOON = 1_790_000_000  # any whole second


@pytest.fixture(scope="session")
def gas_cache(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("gas")


@pytest.fixture
def clock() -> HandClock:
    return HandClock(NOON + 0.5)


@pytest.fixture
def store(tmp_path: Path, gas_cache: Path) -> Iterator[WrittenStore]:
    with WrittenStore(data=tmp_path / "data", gas_cache=gas_cache) as opened:
        yield opened


@pytest.fixture
def app(store: WrittenStore, clock: HandClock) -> Iterator[Dash]:
    made = create_app(site=store.plan, data=store.data, clock=clock)
    yield made
    feed_of(made).close()


@pytest.fixture
def client(app: Dash) -> FlaskClient:
    return app.server.test_client()
