"""What the terminal says: tables without boxes, one fact a line, the account as a sum, flags as sentences."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from textwrap import shorten
from typing import Any

from rich.console import Console
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from fhiro2.catalogue import DERIVED_BY_CODE, MEASURED_BY_NAME, title_of
from fhiro2.census import Census, Prospect, advice, notices
from fhiro2.errors import Bucket
from fhiro2.flags import Flag
from fhiro2.model import WHY_TEXT, Why
from fhiro2.store.entry import Entry
from fhiro2.worker import Cycle
from fhiro2.write.flag import sections

STROKES = {"info": "|", "warning": "||", "critical": "|||"}
MOST_CODES = 40
ANCHOR_WORDS = {
    "arterial": "arterial gases",
    "mixed-venous": "mixed venous gases",
    "central-venous": "central venous gases",
    "pulse-oximetry": "SpO2 readings",
    "cardiac-output": "cardiac outputs",
    "body": "body weights",
}
_VERDICTS = ("go", "part", "no-go")
_BLOOD_WORDS = {"unknown": "not stated", "none": ""}
_MEANING = {
    Bucket.USED: "gave a reading, a stated absence or context",
    Bucket.REPEATED: "the same version again, or superseded",
    Bucket.WAITING: "not final yet",
    Bucket.QUARANTINED: "kept aside with a reason",
    Bucket.OUT_OF_SCOPE: "not what this program reads",
}


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
    if account.get("pending"):
        table.add_row(f"+ {account['pending']}", "pending", "to be computed in the next cycle")
    if account["parts_quarantined"]:
        table.add_row(str(account["parts_quarantined"]), "components", "refused inside resources that were used")
    console.print(table)
    for notice in account["notices"]:
        console.print(Text(f"Notice: {notice}."))


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
    """Each flag as a sentence with its evidence and cautions, in the words of its narrative."""
    console.print(f"\n[bold]Flags for review[/bold]: {len(flags)} episodes")
    for flag in flags:
        console.print(
            Text.assemble(
                (f"\n{STROKES[flag.severity]:<3} {flag.title}", "bold"),
                f" ({flag.severity}), {flag.patient.rpartition('/')[2]}",
            )
        )
        for title, lines in sections(flag):
            style = "dim" if title == "Cautions" else ""
            console.print(Padding(Text(f"{title}." if not lines else f"{title}:", style=style), (0, 0, 0, 4)))
            for line in lines:
                console.print(Padding(Text(f"{line}.", style=style), (0, 0, 0, 6)))
        if flag.cleared is None:
            console.print(Padding(Text("Still standing."), (0, 0, 0, 4)))


def show_census(console: Console, found: Census) -> None:
    """What a feed allows, what would unlock most, what it holds, and where it went; most important first."""
    show_possible(console, found)
    _show_sentences(console, "What would unlock most", advice(found) or ["Nothing: no value lacks an input."])
    _show_sentences(console, "What else to know of this feed", notices(found) or ["Nothing was refused."])
    _show_codes(console, found, mapped=True)
    _show_codes(console, found, mapped=False)
    console.print("\n[bold]Readings admitted, and minutes until known[/bold]")
    table = plain_table("readings", "quantity", "blood", "median min", "90 % min", numbers=(0, 3, 4))
    for (quantity, blood), number in sorted(found.quantities.items()):
        middle, late = found.lags[quantity]
        title = MEASURED_BY_NAME[quantity].title
        table.add_row(str(number), title, _BLOOD_WORDS.get(blood, blood.replace("_", " ")), f"{middle:g}", f"{late:g}")
    console.print(table)
    show_account(console, found.account.as_json())


def show_possible(console: Console, found: Census) -> None:
    """Go or no-go for each derived value, with what the others lack."""
    console.print(f"\n[bold]What this feed allows[/bold] ({found.patients} patients with readings)")
    table = plain_table("", "value", "computed", "what is lacking")
    for prospect in sorted(found.prospects.values(), key=lambda one: _VERDICTS.index(one.verdict())):
        kind = ANCHOR_WORDS.get(prospect.table, "anchors")
        count = f"{prospect.computed} of {prospect.anchors} {kind}" if prospect.anchors else f"no {kind}"
        table.add_row(prospect.verdict(), DERIVED_BY_CODE[prospect.code].title, count, _lacking(prospect))
    console.print(table)
    console.print("go: computed at half of them or more; part: at fewer; no-go: nowhere", style="dim", highlight=False)


def _lacking(prospect: Prospect) -> str:
    """What the values that were not computed lack, the commonest first, with how often unless it is always."""

    def counted(words: str, number: int) -> str:
        return words if number == prospect.anchors else f"{words} ({number} of {prospect.anchors})"

    by_reason: dict[Why, list[str]] = {}
    for (name, why), number in sorted(prospect.lacking.items(), key=lambda row: (-row[1], row[0])):
        by_reason.setdefault(why, []).append(counted(title_of(name), number))
    parts = [f"{WHY_TEXT[why]}: {', '.join(names)}" for why, names in by_reason.items()]
    others = sorted(prospect.other.items(), key=lambda row: (-row[1], row[0]))
    return "; ".join([*parts, *(counted(WHY_TEXT[why], number) for why, number in others)])


def _show_sentences(console: Console, title: str, sentences: Sequence[str]) -> None:
    console.print(f"\n[bold]{title}[/bold]")
    table = plain_table("", "")
    for number, sentence in enumerate(sentences, 1):
        table.add_row(f"{number}.", Text(sentence))
    console.print(table)


def _show_codes(console: Console, found: Census, *, mapped: bool) -> None:
    codes = [(pair, seen) for pair, seen in found.ranked() if seen.mapped() is mapped]
    if not codes:
        return
    console.print(f"\n[bold]{'Codes that are known' if mapped else 'Codes seen but not mapped'}[/bold]")
    last = "what became of them" if mapped else "example"
    table = plain_table("count", "code", "words of the feed", "units", last, numbers=(0,))
    for (system, code), seen in codes[:MOST_CODES]:
        words = shorten(seen.words, 56, placeholder=" ...") + (" (deprecated)" if seen.status == "deprecated" else "")
        end = _shares(seen.ends) if mapped else f"Observation/{seen.example}"
        cells = (str(seen.count), f"{_short(system)} {code}", words, _shares(seen.units), end)
        table.add_row(*map(Text, cells))
    console.print(table)
    if len(codes) > MOST_CODES:
        console.print(f"and {len(codes) - MOST_CODES} more, each of them rarer", style="dim", highlight=False)


def _shares(counts: Counter[str]) -> str:
    """The names counted, the commonest first, with their numbers unless there is only one."""
    ranked = sorted(counts.items(), key=lambda row: (-row[1], row[0]))
    return ranked[0][0] if len(ranked) == 1 else ", ".join(f"{number} {name}" for name, number in ranked)


def show_quarantine(console: Console, lines: Sequence[dict[str, Any]]) -> None:
    """The quarantined resources of a replay (by file and line) or of a store (by row), one a line."""
    stored = any("row" in line for line in lines)
    table = plain_table("reason", "resource", *(("row",) if stored else ("file", "line")), "what is wrong")
    for line in lines:
        part = f" component {line['component']}" if "component" in line else ""
        place = (str(line["row"]),) if stored else (line["file"], str(line["line"]))
        table.add_row(*map(Text, (line["reason"], line["resource"] + part, *place, line["detail"])))
    console.print(table)


def show_cycle(console: Console, done: Cycle, *, writing: bool) -> None:
    """What one cycle did, as sentences."""
    lines = [
        f"{done.received} entries read, {done.repeated} of them known, {done.foreign} not asked for.",
        f"{done.patients} patients computed again; {done.to_write} resources differ from what the server has.",
    ]
    if writing:
        lines.append(
            f"{done.written} written (their Provenance among them), {done.withdrawn} withdrawn, {done.dead} refused, "
            f"{done.waiting} still wait."
        )
    else:
        lines.append(f"Nothing was written: the settings do not say `write: true`. {done.waiting} resources wait.")
    lines += [f"{patient}: flags withheld, the two evaluators disagree." for patient in done.held]
    lines += [f"Notice: {notice}." for notice in done.notices]
    for line in lines:
        console.print(line, highlight=False, markup=False)


def show_retraction(console: Console, done: Cycle) -> None:
    """What was taken back, what was not, and what the next run does."""
    lines = [f"{done.withdrawn} values and flags of ours are now entered in error at the server."]
    if done.dead or done.waiting:
        lines.append(f"{done.dead} writes were refused, {done.waiting} still wait; `fhiro2 written list` names them.")
    lines += [f"Notice: {notice}." for notice in done.notices]
    lines.append(
        "The next `fhiro2 run` computes these patients again and, with `write: true`, writes anew what then stands."
    )
    for line in lines:
        console.print(line, highlight=False, markup=False)


def show_written(console: Console, written: Sequence[Entry], waiting: Sequence[Entry]) -> None:
    """The ledger and the outbox, one resource a line, and how many there are of each state and type."""
    table = plain_table("state", "resource", "patient", "what is wrong")
    for one in (*written, *waiting):
        table.add_row(*map(Text, (one.state, one.reference, one.patient, one.problem)))
    console.print(table)
    counts = Counter((one.state, one.reference.partition("/")[0]) for one in (*written, *waiting))
    for (state, kind), number in sorted(counts.items()):
        console.print(f"{number} {kind} {state}", highlight=False)


def _short(system: str) -> str:
    return {"http://loinc.org": "LOINC", "urn:iso:std:iso:11073:10101": "MDC", "": "(no system)"}.get(system, system)
