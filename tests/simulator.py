"""Input that others made: exports of the hospital simulator clinosim, from an environment of its own.

The simulator is never imported. Its first use makes ``.venv-clinosim`` beside ``pyproject.toml``; what cannot be
installed or run fails the tests that need it, by name.
"""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

REQUIREMENT = "clinosim==0.6.5"
DISEASES = ("sepsis", "copd_exacerbation")
OPTIONS = ("-n", "8", "-s", "5", "--severity", "severe", "--format", "fhir-r4")
ROOT = Path(__file__).parent.parent
ENVIRONMENT = ROOT / ".venv-clinosim"
CONSTRAINTS = ROOT / ".ci" / "simulator-constraints.txt"
SLOWEST = 300  # seconds


@pytest.fixture(scope="session")
def exports(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    """The folder of FHIR R4 NDJSON files of eight severely ill patients of each disease."""
    program = _installed()
    folder = tmp_path_factory.mktemp("simulator")
    running = {
        disease: subprocess.Popen(
            [program, "test-disease", disease, *OPTIONS, "-o", str(folder / disease)],
            cwd=folder,
            env={name: value for name, value in os.environ.items() if name != "PYTHONPATH"},
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
        )
        for disease in DISEASES
    }
    for disease, process in running.items():
        output, _ = process.communicate(timeout=SLOWEST)
        if process.returncode:
            pytest.fail(f"{REQUIREMENT} ended with {process.returncode} for {disease}:\n{output[-2000:]}")
    return {disease: folder / disease / "fhir_r4" for disease in DISEASES}


@pytest.fixture(scope="session", params=DISEASES)
def export(request: pytest.FixtureRequest, exports: dict[str, Path]) -> Path:
    """One export after the other."""
    return exports[request.param]


def _installed() -> str:
    """The simulator's command, installed first where that version is missing."""
    name, _, version = REQUIREMENT.partition("==")
    binaries = ENVIRONMENT / ("Scripts" if os.name == "nt" else "bin")
    if not list(ENVIRONMENT.rglob(f"{name}-{version}.dist-info")):
        for command in (
            [sys.executable, "-m", "venv", "--clear", str(ENVIRONMENT)],
            [str(binaries / "python"), "-m", "pip", "install", "-q", "-c", str(CONSTRAINTS), REQUIREMENT],
        ):
            done = subprocess.run(command, capture_output=True, text=True, timeout=SLOWEST)
            if done.returncode:
                pytest.fail(f"{REQUIREMENT} cannot be installed into {ENVIRONMENT.name}:\n{done.stderr[-2000:]}")
    return str(binaries / name)
