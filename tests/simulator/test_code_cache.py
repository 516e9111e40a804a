"""Where the plant's machine code is kept between runs."""

import os
from pathlib import Path

import pytest

from simulator.code_cache import VARIABLE, choose_code_cache


@pytest.fixture(autouse=True)
def _unset(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv(VARIABLE, "x")  # so that it is put back afterwards
    monkeypatch.delenv(VARIABLE)


def test_folder_of_the_user_is_taken(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    choose_code_cache()
    assert os.environ[VARIABLE] == str(tmp_path / "throwline" / "plant-code")
    assert list((tmp_path / "throwline" / "plant-code").iterdir()) == []  # the probe is gone


def test_named_folder_is_left_alone(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv(VARIABLE, "elsewhere")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    choose_code_cache()
    assert os.environ[VARIABLE] == "elsewhere"
    assert list(tmp_path.iterdir()) == []


def test_named_as_nothing_keeps_nothing(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv(VARIABLE, "")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    choose_code_cache()
    assert os.environ[VARIABLE] == ""


def test_without_a_folder_to_write_there_is_none(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """A file where the folder should be stands for whatever cannot be written, whoever runs this."""
    (tmp_path / "throwline").write_text("in the way")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    choose_code_cache()
    assert VARIABLE not in os.environ
