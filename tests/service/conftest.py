"""One real service for the tests that do not end it."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from tests.service.serving import RunningService


@pytest.fixture(scope="session")
def service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningService]:
    data = tmp_path_factory.mktemp("shared") / "data"
    with RunningService(data, "--max-body-bytes", "1000000") as running:
        yield running
        assert "Traceback" not in running.log, running.log
