"""Starts, stops and asks the server of ``fhir_server.sh``: on a free port of this machine, with an empty store."""

from __future__ import annotations

import os
import socket
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
import requests

SCRIPT = Path(__file__).parent / "fhir_server.sh"
SLOWEST = 300  # seconds, with its installation


@contextmanager
def running(folder: Path, **options: str) -> Iterator[str]:
    """The base URL of a server that runs meanwhile, with its files in ``folder``; ``options`` are the script's."""
    environment = {name: value for name, value in os.environ.items() if name not in ("PYTHONPATH", "FHIR_TOKEN")}
    environment |= {"FHIR_DIR": str(folder), "FHIR_PORT": str(free_port())} | options
    try:
        yield call("start", environment).strip().removeprefix("base_url=")
    finally:
        call("stop", environment)


def found(base_url: str, kind: str) -> list[dict[str, Any]]:
    """All resources of one type, as the server itself tells them."""
    resources, address = [], f"{base_url}/{kind}?_count=1000&_sort=_lastUpdated"
    while address:
        page = requests.get(address, timeout=60).json()
        resources += [entry["resource"] for entry in page.get("entry", ())]
        address = next((link["url"] for link in page["link"] if link["relation"] == "next"), "")
    return resources


def call(word: str, environment: os._Environ[str] | dict[str, str]) -> str:
    """What the script says to one of its words; fails the test where it fails."""
    done = subprocess.run([SCRIPT, word], env=environment, capture_output=True, text=True, timeout=SLOWEST)
    if done.returncode:
        pytest.fail(f"the FHIR test server (tests/fhir_server.sh {word}) failed:\n{done.stderr[-2000:]}")
    return done.stdout


def free_port() -> int:
    """A port of this machine that nothing listens on."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port: int = probe.getsockname()[1]
        return port
