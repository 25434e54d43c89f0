"""The built-in ward through the whole way, told so that a clinician can read it."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from rich.console import Console

from fhiro2.catalogue import decimals_of
from fhiro2.flags import Flag
from fhiro2.judge import read_pack
from fhiro2.model import Column, Outcome, Why
from fhiro2.packaged import rules_folder, ward_folder
from fhiro2.read.ndjson import NdjsonSource
from fhiro2.replay import replay
from fhiro2.settings import Settings, read_mapping
from fhiro2.terminal import plain_table, show_account, show_derived, show_flags
from fhiro2.write.flag import moment_text

PICTURE = (
    ("hb", "Hb g/dL"),
    ("pao2", "PaO2 mmHg"),
    ("pf-ratio", "P/F mmHg"),
    ("oxygen-content-arterial", "CaO2 mL/dL"),
    ("oxygen-delivery", "DO2 mL/min"),
    ("oxygen-consumption", "VO2 mL/min"),
    ("oxygen-extraction-ratio", "O2ER"),
)


def last_pictures(outcome: Outcome) -> list[tuple[str, ...]]:
    """For each patient with an arterial gas, the last one: when, and the main values or a dash."""
    table = outcome.tables["arterial"]
    last = np.flatnonzero(np.diff(table.patient, append=-1))
    return [
        (
            outcome.timelines.patients[int(table.patient[place])].reference.rpartition("/")[2],
            moment_text(int(table.effective[place])),
            *(_shown(table.columns[name], name, int(place)) for name, _ in PICTURE),
        )
        for place in last
    ]


def _shown(column: Column, name: str, place: int) -> str:
    if column.why[place] != Why.KNOWN:
        return "-"
    decimals = decimals_of(name)
    if not np.isfinite(column.value[place]):
        return f"{column.low[place]:.{decimals}f} to {column.high[place]:.{decimals}f}"
    return f"{column.value[place]:.{decimals}f} ± {column.uncertainty[place]:.{decimals}f}"


def run_demo(console: Console, out: Path) -> None:
    """Replay the ward into ``out`` and show what came in, what was derived and which flags were raised."""
    folder = ward_folder()
    flags: list[Flag] = []
    pictures: list[tuple[str, ...]] = []

    def watch(outcome: Outcome, _: float) -> None:
        flags.extend(outcome.flags)
        pictures.extend(last_pictures(outcome))

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
    console.print("\n[bold]The last arterial gas of each bed[/bold] (value ± standard uncertainty)")
    table = plain_table("patient", "taken", *(title for _, title in PICTURE), numbers=range(2, 2 + len(PICTURE)))
    for row in pictures:
        table.add_row(*row)
    console.print(table)
    show_flags(console, sorted(flags, key=lambda flag: (flag.raised, flag.patient, flag.rule)))
    console.print(
        "\nDecision support for trained staff; not an alarm. Local policy and licensed practice decide.", style="dim"
    )
