"""Shared test set-up: property tests judge by answers, never by how busy the machine is."""

import logging
from collections.abc import Iterator

import pytest
from hypothesis import HealthCheck, settings

from tests.planted import SECRETS

settings.register_profile("quick", deadline=None, max_examples=60, suppress_health_check=[HealthCheck.too_slow])
settings.register_profile("full", deadline=None, max_examples=2000, suppress_health_check=[HealthCheck.too_slow])


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--full", action="store_true", help="many more examples in property and fault tests")


def pytest_configure(config: pytest.Config) -> None:
    settings.load_profile("full" if config.getoption("--full") else "quick")


class _Listener(logging.Handler):
    """Hears every record of every library, and remembers those that tell a secret."""

    def __init__(self) -> None:
        super().__init__(logging.DEBUG)
        self.told: list[str] = []

    def emit(self, record: logging.LogRecord) -> None:
        text = record.getMessage()
        if any(secret in text for secret in SECRETS):
            self.told.append(f"{record.name}: {text}")


@pytest.fixture(autouse=True)
def _no_secret_is_logged() -> Iterator[None]:
    """What the tests plant never stands in a log, whoever writes it."""
    listener, root = _Listener(), logging.getLogger()
    level = root.level
    root.addHandler(listener)
    root.setLevel(logging.DEBUG)
    yield
    root.setLevel(level)
    root.removeHandler(listener)
    assert listener.told == []
