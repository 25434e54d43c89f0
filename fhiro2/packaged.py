"""Where the shipped data lies: inside an installed package, or beside it in a checkout."""

from __future__ import annotations

from pathlib import Path

from fhiro2.errors import StopError

_PACKAGE = Path(__file__).parent


def rules_folder() -> Path:
    """The shipped rules; raises StopError where neither the package nor the checkout has them."""
    return _first(_PACKAGE / "packaged_data" / "rules", _PACKAGE.parent / "rules")


def ward_folder() -> Path:
    """The synthetic ward; raises StopError where neither the package nor the checkout has it."""
    return _first(_PACKAGE / "packaged_data" / "ward", _PACKAGE.parent / "fixtures" / "ward")


def _first(packaged: Path, checkout: Path) -> Path:
    for folder in (packaged, checkout):
        if folder.is_dir():
            return folder
    raise StopError(f"{packaged}: the shipped data is missing, and so is {checkout}; install the package again")
