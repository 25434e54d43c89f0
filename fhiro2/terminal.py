"""What the terminal says: tables without boxes, one fact a line, the account as a sum, flags as sentences."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import UTC, datetime
from typing import Any

from rich.console import Console
from rich.table import Table
from rich.text import Text

from fhiro2.catalogue import DERIVED_BY_CODE, title_of
from fhiro2.census import Census, advice
from fhiro2.errors import Bucket
from fhiro2.model import MICROSECONDS, Flag

STROKES = {"info": "|", "warning": "||", "critical": "|||"}
_MEANING = {
    Bucket.USED: "gave a reading, a stated absence or context",
    Bucket.REPEATED: "the same version again, or superseded",
    Bucket.WAITING: "not final yet",
    Bucket.QUARANTINED: "kept aside with a reason",
    Bucket.OUT_OF_SCOPE: "not what this program reads",
}


def moment_text(moment: int) -> str:
    """A time in microseconds as 05-Mar-2026 14:05 UTC."""
    return datetime.fromtimestamp(moment / MICROSECONDS, UTC).strftime("%d-%b-%Y %H:%M UTC")


def plain_table(*columns: str, numbers: Sequence[int] = ()) -> Table:
    """A table without lines; ``numbers`` are the columns to align right."""
    table = Table(box=None, pad_edge=False, show_header=any(columns), header_style="dim", padding=(0, 2, 0, 0))
    for place, name in enumerate(columns):
        table.add_column(name, justify="right" if place in numbers else "left", overflow="fold")
    return table


def show_account(console: Console, account: dict[str, Any]) -> None:
    """The account as a balanced sum, with the reasons under each part."""
    console.print("\n[bold]What came in, and where it went[/bold]")
    table = plain_table("", "", "", numbers=(0,))
    table.add_row(str(account["received"]), "received", "")
    for sign, bucket in zip("=++++", Bucket, strict=True):
        table.add_row(f"{sign} {account[bucket.value]}", bucket.value.replace("_", " "), _MEANING[bucket])
        for reason, number in sorted(account["reasons"][bucket.value].items(), key=lambda row: (-row[1], row[0])):
            table.add_row("", Text(f"  {number} {reason}", style="dim"), "")
    if account["parts_quarantined"]:
        table.add_row(str(account["parts_quarantined"]), "components", "refused inside resources that were used")
    console.print(table)


def show_derived(console: Console, account: dict[str, Any]) -> None:
    """What was derived, and what could not be computed and why."""
    console.print(
        f"\n[bold]What was derived[/bold]: {account['derived']} values; "
        f"{account['not_computable']} were not computable"
    )
    table = plain_table("values", "quantity", "not computable, and the commonest reasons", numbers=(0,))
    for code, row in DERIVED_BY_CODE.items():
        reasons: dict[str, int] = account["not_computable_by_code"].get(code, {})
        done = account["derived_by_code"].get(code, 0)
        if not done and not reasons:
            continue
        ranked = sorted(reasons.items(), key=lambda item: (-item[1], item[0]))
        words = "; ".join(f"{number} {why}" for why, number in ranked[:3])
        table.add_row(str(done), row.title, f"{sum(reasons.values())}: {words}" if reasons else "0")
    console.print(table)


def show_flags(console: Console, flags: Sequence[Flag]) -> None:
    """Each flag as a sentence with its evidence and cautions."""
    console.print(f"\n[bold]Flags for review[/bold]: {len(flags)} episodes")
    for flag in flags:
        state = "still standing" if flag.cleared is None else f"cleared {moment_text(flag.cleared)}"
        console.print(
            Text.assemble(
                (f"{STROKES[flag.severity]:<3} ", "bold"),
                (flag.title, "bold"),
                f" ({flag.severity}), {flag.patient.rpartition('/')[2]}: {flag.message}",
            )
        )
        console.print(
            f"      raised {moment_text(flag.raised)}, {state}; probability that the limit was truly crossed "
            f"{flag.probability:.2f}",
            highlight=False,
        )
        evidence = "; ".join(
            f"{title_of(row.name)} {row.value:g} {row.unit} (u {row.uncertainty:.2g})".replace("mm[Hg]", "mmHg")
            for row in flag.evidence
        )
        console.print(f"      evidence: {evidence}", highlight=False)
        console.print(f"      cautions: {'; '.join(flag.cautions)}", style="dim", highlight=False)


def show_census(console: Console, found: Census) -> None:
    """What a feed holds, what it allows, and what would unlock most."""
    account = found.account.as_json()
    show_account(console, account)
    console.print("\n[bold]Codes seen[/bold]")
    table = plain_table("count", "code", "words of the feed", "units", "what became of them", numbers=(0,))
    for (system, code), seen in sorted(found.codes.items(), key=lambda row: (-row[1].count, row[0]))[:40]:
        units = ", ".join(f"{unit} {number}" for unit, number in seen.units.most_common(3))
        ends = ", ".join(f"{number} {end}" for end, number in seen.ends.most_common(3))
        table.add_row(str(seen.count), f"{_short(system)} {code}", seen.words[:48], units, ends)
    console.print(table)
    console.print("\n[bold]Readings admitted, and minutes until known[/bold]")
    table = plain_table("readings", "quantity", "blood", "median min", "90 % min", numbers=(0, 3, 4))
    for (quantity, blood), number in sorted(found.quantities.items()):
        middle, late = found.lags[quantity]
        table.add_row(str(number), quantity, blood.replace("_", " "), f"{middle:g}", f"{late:g}")
    console.print(table)
    show_possible(console, found)


def show_possible(console: Console, found: Census) -> None:
    """Go or no-go for each derived value, and the advice."""
    console.print(f"\n[bold]What this feed allows[/bold] ({found.anchors} anchors)")
    table = plain_table("", "value", "computed", "not", "", numbers=(2, 3))
    reasons = found.account.as_json()["not_computable_by_code"]
    for code, done, refused in found.possible():
        ranked = sorted(reasons.get(code, {}).items(), key=lambda item: (-item[1], item[0]))
        words = f"mostly {ranked[0][0]}" if ranked else ""
        verdict = "go" if done and done >= refused else "part" if done else "no-go"
        table.add_row(verdict, DERIVED_BY_CODE[code].title, str(done), str(refused), words)
    console.print(table)
    sentences = advice(found)
    console.print("\n[bold]What would unlock most[/bold]")
    for sentence in sentences or ["Nothing: every anchor gave every value."]:
        console.print(f"  {sentence}", highlight=False)


def show_quarantine(console: Console, lines: Sequence[dict[str, Any]]) -> None:
    """The quarantined resources, one a line."""
    table = plain_table("reason", "resource", "file", "line", "what is wrong", numbers=(3,))
    for line in lines:
        part = f" component {line['component']}" if "component" in line else ""
        table.add_row(line["reason"], line["resource"] + part, line["file"], str(line["line"]), line["detail"])
    console.print(table)


def _short(system: str) -> str:
    return {"http://loinc.org": "LOINC", "urn:iso:std:iso:11073:10101": "MDC", "": "(no system)"}.get(system, system)
