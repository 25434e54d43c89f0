"""Fixtures for tests of a worker beside a server in memory."""

from __future__ import annotations

import logging
from collections.abc import Iterator
from pathlib import Path

import pytest
import responses

from tests.beside import Beside, Held, beside, undisturbed
from tests.planted import SECRETS


@pytest.fixture
def mock() -> Iterator[responses.RequestsMock]:
    with responses.RequestsMock(assert_all_requests_are_fired=False) as found:
        yield found


@pytest.fixture
def made(tmp_path: Path, mock: responses.RequestsMock) -> Beside:
    return beside(tmp_path / "made", mock)


@pytest.fixture(scope="module")
def calm(tmp_path_factory: pytest.TempPathFactory) -> Held:
    """What the same ward ends with without a fault."""
    return undisturbed(tmp_path_factory.mktemp("calm"))


@pytest.fixture
def nothing_told(capfd: pytest.CaptureFixture[str], caplog: pytest.LogCaptureFixture) -> Iterator[None]:
    """The test may print or log no name, value or token."""
    caplog.set_level(logging.DEBUG)
    yield
    told = "".join([*capfd.readouterr(), caplog.text])
    assert not [secret for secret in SECRETS if secret in told]
