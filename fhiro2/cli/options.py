"""Options that several commands share, and the documents that they name."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

if TYPE_CHECKING:
    from fhiro2.judge import Pack
    from fhiro2.settings import Mapping, Settings

SettingsFile = Annotated[Path | None, typer.Option("--settings", help="settings of the site (YAML)")]
MappingFile = Annotated[Path | None, typer.Option("--mapping", help="signed mapping of the site (YAML)")]
RulesFolder = Annotated[Path | None, typer.Option("--rules", help="folder of rules; the shipped ones without it")]
AsJson = Annotated[bool, typer.Option("--json", help="print JSON for machines")]


def settings_in(path: Path | None) -> Settings:
    """The settings in a file, or those that hold without one; raises StopError."""
    from fhiro2.settings import Settings, read_settings

    return read_settings(path) if path else Settings()


def mapping_in(path: Path | None) -> Mapping:
    """The mapping in a file, or the empty one; raises StopError."""
    from fhiro2.settings import NO_MAPPING, read_mapping

    return read_mapping(path) if path else NO_MAPPING


def pack_in(folder: Path | None) -> Pack:
    """The rules in a folder, or the shipped ones; raises StopError."""
    from fhiro2.judge import read_pack
    from fhiro2.packaged import rules_folder

    return read_pack(folder or rules_folder())


def print_json(content: Any) -> None:
    """Print for machines."""
    sys.stdout.write(json.dumps(content, indent=2) + "\n")
