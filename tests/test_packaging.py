"""The wheel, built from the sdist, carries rules, codes and ward, and works with no checkout beside it."""

import os
import re
import subprocess
import sys
import tomllib
from importlib.metadata import packages_distributions
from pathlib import Path

import pytest

CHECKOUT = Path(__file__).parent.parent


def run(*words: str, cwd: Path, path: Path | None = None) -> str:
    environment = {key: value for key, value in os.environ.items() if key != "PYTHONPATH"}
    if path is not None:
        environment["PYTHONPATH"] = str(path)
    found = subprocess.run(
        [sys.executable, *words], cwd=cwd, env=environment, capture_output=True, text=True, timeout=300, check=False
    )
    assert found.returncode == 0, found.stdout + found.stderr
    return found.stdout


@pytest.fixture(scope="module")
def installed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the package as the wheel installs it."""
    built, target = tmp_path_factory.mktemp("built"), tmp_path_factory.mktemp("installed")
    run("-m", "build", "--no-isolation", "-o", str(built), str(CHECKOUT), cwd=built)
    (wheel,) = built.glob("*.whl")
    assert list(built.glob("*.tar.gz"))
    run("-m", "pip", "install", "-q", "--no-deps", "--target", str(target), str(wheel), cwd=built)
    return target


def test_the_wheel_works_from_an_empty_folder(installed: Path, tmp_path: Path) -> None:
    where = run("-c", "import fhiro2; print(fhiro2.__file__)", cwd=tmp_path, path=installed)
    assert where.strip().startswith(str(installed))
    told = run("-m", "fhiro2", "demo", "--once", cwd=tmp_path, path=installed)
    assert "Low arterial oxygen" in told
    assert "all cases passed" in run("-m", "fhiro2", "rules", "check", cwd=tmp_path, path=installed)
    assert list(tmp_path.iterdir()) == []


def test_the_wheel_holds_every_module_and_its_commands(installed: Path, tmp_path: Path) -> None:
    modules = {file.relative_to(CHECKOUT) for file in (CHECKOUT / "fhiro2").rglob("*.py")}
    assert modules == {
        file.relative_to(installed)
        for file in (installed / "fhiro2").rglob("*.py")
        if "packaged_data" not in file.parts
    }
    for words in (["run"], ["account"], ["quarantine", "retry"], ["written", "list"], ["written", "retract"]):
        assert f"Usage: python -m fhiro2 {' '.join(words)} " in run(
            "-m", "fhiro2", *words, "--help", cwd=tmp_path, path=installed
        )


def test_everything_that_is_imported_is_required() -> None:
    """By the metadata of the installed distributions: which of them gives each module that the program imports."""
    text = "\n".join(file.read_text(encoding="utf-8") for file in (CHECKOUT / "fhiro2").rglob("*.py"))
    imported = set(re.findall(r"^\s*(?:from|import) (\w+)", text, re.MULTILINE)) - sys.stdlib_module_names
    given = packages_distributions()
    project = tomllib.loads((CHECKOUT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    required = {re.split("[^A-Za-z0-9._-]", one)[0].lower() for one in project["dependencies"]}
    needed = {name for name in imported - {"fhiro2", "durable"} if name in given}
    assert len(needed) > 8
    for name in needed:
        assert {one.lower() for one in given[name]} & required, name


def test_the_shipped_data_is_the_checkout_s(installed: Path) -> None:
    shipped = installed / "fhiro2" / "packaged_data"
    for name, folder in (("rules", CHECKOUT / "rules"), ("ward", CHECKOUT / "fixtures" / "ward")):
        files = sorted(file.relative_to(folder) for file in folder.rglob("*") if file.is_file())
        assert files == sorted(
            file.relative_to(shipped / name) for file in (shipped / name).rglob("*") if file.is_file()
        )
        assert all((folder / file).read_bytes() == (shipped / name / file).read_bytes() for file in files)
