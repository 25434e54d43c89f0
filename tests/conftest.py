"""Shared test set-up: property tests judge by answers, never by how busy the machine is."""

import pytest
from hypothesis import HealthCheck, settings

settings.register_profile("quick", deadline=None, max_examples=60, suppress_health_check=[HealthCheck.too_slow])
settings.register_profile("full", deadline=None, max_examples=2000, suppress_health_check=[HealthCheck.too_slow])


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--full", action="store_true", help="many more examples in property and fault tests")


def pytest_configure(config: pytest.Config) -> None:
    settings.load_profile("full" if config.getoption("--full") else "quick")
