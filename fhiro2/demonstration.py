"""The built-in ward through the whole way, told so that a clinician can read it."""

from __future__ import annotations

from pathlib import Path

from rich.console import Console

from fhiro2.judge import read_pack
from fhiro2.model import Flag, Outcome
from fhiro2.packaged import rules_folder, ward_folder
from fhiro2.read.ndjson import NdjsonSource
from fhiro2.replay import replay
from fhiro2.settings import Settings, read_mapping
from fhiro2.terminal import show_account, show_derived, show_flags


def run_demo(console: Console, out: Path) -> None:
    """Replay the ward into ``out`` and show what came in, what was derived and which flags were raised."""
    folder = ward_folder()
    flags: list[Flag] = []

    def watch(outcome: Outcome) -> None:
        flags.extend(outcome.flags)

    account = replay(
        [NdjsonSource("ward-nine", [folder])],
        out,
        Settings(),
        read_mapping(folder / "mapping.yaml"),
        read_pack(rules_folder()),
        watch,
    ).as_json()
    console.print("[bold]Ward Nine[/bold]: twelve synthetic beds over 48 hours; no real person", highlight=False)
    show_account(console, account)
    show_derived(console, account)
    show_flags(console, sorted(flags, key=lambda flag: (flag.raised, flag.patient, flag.rule)))
    console.print(
        "\nDecision support for trained staff; not an alarm. Local policy and licensed practice decide.", style="dim"
    )
