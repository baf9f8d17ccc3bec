"""Where settings come from, and which are refused."""

from __future__ import annotations

from pathlib import Path

import pytest
from pydantic import ValidationError

from service.settings import load_settings


def test_flags_before_environment_before_file_before_defaults(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    file = tmp_path / "slackwater.toml"
    file.write_text("port = 1\nmax_runs = 7\nmin_free_bytes = 9\n")
    monkeypatch.setenv("SLACKWATER_PORT", "2")
    monkeypatch.setenv("SLACKWATER_MAX_RUNS", "8")
    settings = load_settings({"port": 3, "host": None}, file)
    assert (settings.port, settings.max_runs, settings.min_free_bytes) == (3, 8, 9)
    assert settings.host == "127.0.0.1"


@pytest.mark.parametrize("host", ["0.0.0.0", "::", "192.0.2.1", "rig.example"])
def test_other_machines_need_a_token(host: str) -> None:
    with pytest.raises(ValidationError, match="SLACKWATER_TOKEN"):
        load_settings({"host": host})
    assert load_settings({"host": host, "token": "x" * 16}).host == host


@pytest.mark.parametrize("host", ["127.0.0.1", "127.0.0.9", "::1", "localhost"])
def test_loopback_needs_none(host: str) -> None:
    assert load_settings({"host": host}).token is None


def test_short_tokens_and_unknown_settings_are_refused(tmp_path: Path) -> None:
    with pytest.raises(ValidationError, match="16"):
        load_settings({"token": "short"})
    file = tmp_path / "slackwater.toml"
    file.write_text("prot = 1\n")
    with pytest.raises(ValidationError, match="prot"):
        load_settings({}, file)
    with pytest.raises(FileNotFoundError, match=r"none\.toml"):
        load_settings({}, tmp_path / "none.toml")
