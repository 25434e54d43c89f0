"""The README's example of a server, word for word as a newcomer runs it, and a cycle that is interrupted."""

from __future__ import annotations

import os
import re
import shutil
import signal
import sqlite3
import subprocess
import sys
import time
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from pathlib import Path
from typing import Any

import pytest
import requests

from fhiro2.fhir import systems
from tests.fhir_server import SCRIPT, found, free_port, running

ROOT = Path(__file__).parent.parent
SECTION = (ROOT / "README.md").read_text(encoding="utf-8").split("\n## Beside a FHIR server\n")[1].split("\n## ")[0]
PROGRAM = Path(sys.executable).parent / "fhiro2"
SLOWEST = 300  # seconds for one command, the first of which may install the server
UNLOADABLE = 2  # fixtures/ward/README.md: one last line that breaks off, one time without offset (which R4 forbids)
KINDS = ("Device", "Flag", "Observation", "Provenance")
OURS = {systems.VALUE_IDENTIFIER, systems.FLAG_IDENTIFIER, systems.SOFTWARE_IDENTIFIER}


def commands() -> list[str]:
    """All commands of the section, each with its here-document, with the program found on PATH instead of in .venv."""
    told: list[str] = []
    for block in re.findall(r"```sh\n(.*?)```", SECTION, re.DOTALL):
        waiting = ""
        for line in block.splitlines():
            if waiting:
                told[-1] += f"\n{line}"
                waiting = "" if line == waiting else waiting
            else:
                told.append(line)
                waiting = "".join(re.findall(r"<<(\w+)", line))
    return [command.replace(".venv/bin/fhiro2", "fhiro2") for command in told]


class Newcomer:
    """Somebody in a fresh copy of the checkout, with fhiro2 installed."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        for part in (".ci", "tests", "fixtures"):
            shutil.copytree(ROOT / part, folder / part)
        self.port = free_port()
        self.base_url = f"http://127.0.0.1:{self.port}/fhir"
        self.environment = {
            **{name: value for name, value in os.environ.items() if not name.startswith(("FHIR", "FHIRO2"))},
            "PATH": f"{PROGRAM.parent}{os.pathsep}{os.environ['PATH']}",
            "PYTHONPATH": str(ROOT),
            "FHIR_PORT": str(self.port),
            "FHIR_DIR": str(folder / "server"),
            "COLUMNS": "200",
        }

    def does(self, command: str) -> str:
        """What the command says; it must succeed."""
        done = subprocess.run(
            ["bash", "-o", "pipefail", "-c", command],
            cwd=self.folder, env=self.environment, capture_output=True, text=True, timeout=SLOWEST,
        )  # fmt: skip
        assert done.returncode == 0, f"{command}\n{done.stdout[-2000:]}{done.stderr[-2000:]}"
        return done.stdout

    def ours(self, kind: str) -> list[dict[str, Any]]:
        """All resources of ours that the server has, by its own words."""
        return [
            one
            for one in found(self.base_url, kind)
            if OURS & {row.get("system") for row in (*one.get("identifier", ()), *agents(one))}
        ]

    def in_force(self) -> Counter[str]:
        return Counter(
            one["resourceType"]
            for kind in ("Observation", "Flag")
            for one in self.ours(kind)
            if one["status"] != "entered-in-error"
        )


def agents(resource: dict[str, Any]) -> list[dict[str, Any]]:
    """The identifiers of who made a resource: Provenance has none of its own in R4."""
    return [agent["who"].get("identifier", {}) for agent in resource.get("agent", ())]


@pytest.fixture
def newcomer(tmp_path: Path) -> Iterator[Newcomer]:
    somebody = Newcomer(tmp_path / "checkout")
    try:
        yield somebody
    finally:
        subprocess.run([SCRIPT, "stop"], env=somebody.environment, check=True, timeout=60)


def test_the_example_does_what_the_page_says(newcomer: Newcomer) -> None:
    start, load, settings, dry, allow, write, account, listed, retract, stop = commands()
    assert f"base_url={newcomer.base_url}" in newcomer.does(start)
    assert f" {UNLOADABLE} lines refused" in newcomer.does(load)
    newcomer.does(settings)
    before = Counter({kind: len(found(newcomer.base_url, kind)) for kind in ("Observation", "Device", "Patient")})
    assert before["Patient"] == 13

    said = newcomer.does(dry)
    assert "Nothing was written" in said
    (would,) = re.findall(r"(\d+) resources differ", said)
    assert Counter({kind: len(found(newcomer.base_url, kind)) for kind in before}) == before
    assert found(newcomer.base_url, "Flag") == found(newcomer.base_url, "Provenance") == []

    newcomer.does(allow)
    assert ", 0 withdrawn, 0 refused, 0 still wait." in newcomer.does(write)
    written = newcomer.in_force()
    assert sum(written.values()) == int(would)
    assert min(written["Observation"], written["Flag"]) > 0
    assert len(newcomer.ours("Provenance")) == sum(written.values())

    sums = re.findall(r"^\s*[=+]?\s*(\d+)  (?:\w+ ?)+ {2}", newcomer.does(account), re.MULTILINE)
    received, *parts = map(int, sums)
    assert received == sum(parts) > 0
    told = newcomer.does(listed).splitlines()
    assert told == [f"{len(newcomer.ours(kind))} {kind} standing" for kind in KINDS]

    again = newcomer.does(write)
    assert "0 resources differ" in again
    assert "\n0 written" in again
    assert {one["meta"]["versionId"] for kind in KINDS for one in newcomer.ours(kind)} == {"1"}

    taken_back = newcomer.does(retract)
    assert taken_back.startswith(f"{would} values and flags of ours are now entered in error")
    assert "with `write: true`, writes anew" in taken_back
    assert newcomer.in_force() == Counter()
    assert len(newcomer.ours("Observation")) == written["Observation"]
    assert len(newcomer.ours("Provenance")) == 2 * sum(written.values())
    assert len(newcomer.ours("Device")) == 1
    assert len(found(newcomer.base_url, "Observation")) - written["Observation"] == before["Observation"]

    newcomer.does(stop)
    with pytest.raises(requests.ConnectionError):
        requests.get(f"{newcomer.base_url}/metadata", timeout=5)


@pytest.mark.parametrize(
    ("words", "code", "says"),
    [
        (["load"], 2, "usage:"),
        (["load", "fixtures/ward"], 1, "no server runs in"),
        (["begin"], 2, "install|start|load FOLDER|stop"),
    ],
)
def test_what_the_server_s_script_cannot_do_is_said(tmp_path: Path, words: list[str], code: int, says: str) -> None:
    done = subprocess.run(
        [SCRIPT, *words], cwd=ROOT, env=os.environ | {"FHIR_DIR": str(tmp_path)}, capture_output=True, text=True
    )
    assert done.returncode == code
    assert says in done.stderr


# --- interrupted -------------------------------------------------------------------------------------------------


# a program that is started in the background is deaf to SIGINT, and so would be all that it starts
HEARING = """
import signal
from fhiro2.cli import main
signal.signal(signal.SIGINT, signal.default_int_handler)
main()
"""


class Site:
    """A site with its settings and store, before a server."""

    def __init__(self, folder: Path) -> None:
        self.settings = folder / "site.yaml"
        self.store = folder / "site.sqlite"

    def point_to(self, base_url: str) -> None:
        self.settings.write_text(
            f"server: {{url: '{base_url}'}}\nstation_pressure_kpa: 101.3\nstore: {self.store}\nwrite: true\n"
        )

    @contextmanager
    def started(self) -> Iterator[subprocess.Popen[str]]:
        """A cycle under way."""
        words = [sys.executable, "-c", HEARING, "run", "--once", "--settings", str(self.settings)]
        pipe = subprocess.PIPE
        with subprocess.Popen(words, cwd=ROOT, stdout=pipe, stderr=pipe, text=True) as process:
            try:
                yield process
            finally:
                process.kill()

    def count(self, table: str) -> int:
        """Rows of a table of the store, 0 where it is not there yet."""
        if not self.store.exists():
            return 0
        with closing(sqlite3.connect(f"file:{self.store}?mode=ro", uri=True)) as connection:
            try:
                return int(connection.execute(f"SELECT count(*) FROM {table}").fetchone()[0])  # noqa: S608
            except sqlite3.OperationalError:
                return 0

    def interrupted(self, reached: Callable[[], bool]) -> int:
        """The exit code of a cycle that gets a SIGINT once ``reached`` is true."""
        with self.started() as process:
            while not reached():
                assert process.poll() is None, process.communicate()
                time.sleep(0.01)
            process.send_signal(signal.SIGINT)
            _, said = process.communicate(timeout=60)
        assert "Traceback" not in said
        return process.returncode


def two_beds(folder: Path) -> Path:
    """The ward with the Observations of two of its beds."""
    folder.mkdir()
    for file in (ROOT / "fixtures" / "ward").glob("*.ndjson"):
        lines = file.read_text(encoding="utf-8").splitlines(keepends=True)
        mine = [line for line in lines if "Observation" not in line or re.search(r"Patient/w9-p0[23]\b", line)]
        (folder / file.name).write_text("".join(mine), encoding="utf-8")
    return folder


def test_what_is_interrupted_is_taken_up_again(tmp_path: Path) -> None:
    """While reading, while writing, with the server gone: nothing is lost, and nothing is written twice."""
    site = Site(tmp_path)
    with running(tmp_path / "server") as base_url:
        words = [sys.executable, str(ROOT / "tests" / "fhir_load.py"), base_url, str(two_beds(tmp_path / "ward"))]
        subprocess.run(words, check=True, timeout=SLOWEST, capture_output=True)
        site.point_to(base_url)
        assert site.interrupted(lambda: site.count("version") > 0) == 130
        assert (site.count("lease"), site.count("cursor"), site.count("written")) == (0, 0, 0)
        kept = site.count("version")
        assert kept > 0

        assert site.interrupted(lambda: site.count("written") >= 20) == 130
        assert site.count("lease") == 0
        assert site.count("version") > kept
        assert site.count("cursor") > 0
        tables = ("version", "cursor", "written", "outbox", "doubt")
        before = {table: site.count(table) for table in tables}
        assert before["outbox"] > 0

        site.point_to(f"http://127.0.0.1:{free_port()}/fhir")
        with site.started() as process:
            _, said = process.communicate(timeout=120)
        assert process.returncode == 2
        assert said.startswith("fhiro2: GET Observation, page 1: the connection failed")
        assert said.endswith("try again later\n")
        assert {table: site.count(table) for table in tables} == before

        site.point_to(base_url)
        with site.started() as process:
            said, _ = process.communicate(timeout=SLOWEST)
        assert process.returncode == 0, said
        assert (site.count("outbox"), site.count("doubt"), site.count("lease")) == (0, 0, 0)
        values = [
            one
            for one in found(base_url, "Observation")
            if any(row.get("system") == systems.VALUE_IDENTIFIER for row in one.get("identifier", ()))
        ]
        everything = [*values, *found(base_url, "Flag"), *found(base_url, "Provenance")]
        assert len(everything) + 1 == site.count("written")
        assert {one["meta"]["versionId"] for one in everything} == {"1"}
