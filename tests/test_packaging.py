"""The wheel, built from the sdist, carries rules, codes and ward, and works with no checkout beside it."""

import os
import subprocess
import sys
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


def test_the_shipped_data_is_the_checkout_s(installed: Path) -> None:
    shipped = installed / "fhiro2" / "packaged_data"
    for name, folder in (("rules", CHECKOUT / "rules"), ("ward", CHECKOUT / "fixtures" / "ward")):
        files = sorted(file.relative_to(folder) for file in folder.rglob("*") if file.is_file())
        assert files == sorted(
            file.relative_to(shipped / name) for file in (shipped / name).rglob("*") if file.is_file()
        )
        assert all((folder / file).read_bytes() == (shipped / name / file).read_bytes() for file in files)
