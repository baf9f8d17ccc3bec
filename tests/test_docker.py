"""The image and the compose file, checked without an engine: what they copy exists, what they set is a setting."""

from __future__ import annotations

import re
from pathlib import Path

import yaml

from service.settings import Settings

ROOT = Path(__file__).parents[1]
INSTRUCTIONS = {"FROM", "RUN", "WORKDIR", "COPY", "USER", "VOLUME", "EXPOSE", "ENV"}
INSTRUCTIONS |= {"HEALTHCHECK", "STOPSIGNAL", "ENTRYPOINT"}


def instructions() -> list[tuple[str, str]]:
    text = re.sub(r"\\\n", " ", (ROOT / "docker" / "Dockerfile").read_text())
    lines = [line for line in text.splitlines() if line.strip() and not line.startswith("#")]
    return [(line.split(None, 1)[0], line.split(None, 1)[1].strip()) for line in lines]


def check_settings(names: list[str]) -> None:
    for name in names:
        assert name.removeprefix("SLACKWATER_").lower() in Settings.model_fields, name


def test_the_image() -> None:
    found = instructions()
    assert {name for name, _ in found} <= INSTRUCTIONS
    for name, text in found:
        if name == "COPY":
            for source in text.split()[:-1]:
                assert (ROOT / source).exists(), source
    names = [name for name, _ in found]
    assert names.index("USER") < names.index("ENTRYPOINT")
    assert dict(found)["USER"] not in ("root", "0")
    assert "HEALTHCHECK" in names
    check_settings(re.findall(r"(SLACKWATER_\w+)=", dict(found)["ENV"]))


def test_the_compose_file() -> None:
    (service,) = yaml.safe_load((ROOT / "docker" / "compose.yaml").read_text())["services"].values()
    assert (ROOT / "docker" / service["build"]["context"] / service["build"]["dockerfile"]).is_file()
    assert all(port.startswith("127.0.0.1:") for port in service["ports"])
    check_settings(list(service["environment"]))
