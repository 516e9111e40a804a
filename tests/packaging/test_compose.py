"""The compose file, as far as it can be tried without a container engine."""

from pathlib import Path
from typing import Any

import pytest
from ruamel.yaml import YAML
from typer.testing import CliRunner

from agent.cli import app

ROOT = Path(__file__).resolve().parents[2]
SERVICES: dict[str, Any] = YAML(typ="safe").load((ROOT / "docker-compose.yml").read_text())["services"]


def test_it_says_that_it_is_untried() -> None:
    assert "UNTRIED" in (ROOT / "docker-compose.yml").read_text(encoding="utf-8")
    assert "UNTRIED" in (ROOT / "agent" / "Dockerfile").read_text(encoding="utf-8")


def test_it_holds_agent_pages_broker_and_database() -> None:
    assert set(SERVICES) == {"agent", "dashboard", "broker", "influxdb"}


@pytest.mark.parametrize("name", SERVICES)
def test_no_port_is_open_outside_this_host(name: str) -> None:
    assert all(port.startswith("127.0.0.1:") for port in SERVICES[name].get("ports", []))


def test_there_is_no_default_password() -> None:
    environment = SERVICES["influxdb"]["environment"]
    secrets = [v for k, v in environment.items() if k.endswith(("PASSWORD", "TOKEN"))]
    assert len(secrets) == 2
    assert all(value.startswith("${") and ":?" in value for value in secrets)


@pytest.mark.parametrize("name", ["agent", "dashboard"])
def test_its_commands_are_ours(name: str) -> None:
    command, site, option, folder = SERVICES[name]["command"]
    told = CliRunner().invoke(app, [command, "--help"], env={"COLUMNS": "200", "NO_COLOR": "1"})
    assert told.exit_code == 0
    assert option in told.output
    assert site.startswith(folder)
