"""What all tests share."""

from tests.clients.conftest import service  # noqa: F401 - a fixture for every folder
