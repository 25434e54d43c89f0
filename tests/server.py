"""A real FHIR server for tests, of other authors: ``fhir_server.sh`` installs, starts and stops it.

One server without authentication and one with a token, each for the whole session on a free port of this machine with
an empty store. What cannot be installed or started fails the tests that need it, by name.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.fhir_server import call, running


@pytest.fixture(scope="session")
def open_server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """The base URL of a server that lets everybody in."""
    with running(tmp_path_factory.mktemp("open-server")) as base_url:
        yield base_url


@pytest.fixture(scope="session")
def guarded_server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[str, str]]:
    """The base URL of a server, and the only token that it lets in."""
    token = "let-this-one-in"
    with running(tmp_path_factory.mktemp("guarded-server"), FHIR_TOKEN=token) as base_url:
        yield base_url, token


@pytest.fixture(scope="session")
def server_python() -> str:
    """The Python of the server's environment, which has libraries that this project does not ask for."""
    return str(Path(call("install", os.environ).strip(), "bin", "python"))
