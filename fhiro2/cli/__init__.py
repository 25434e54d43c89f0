"""Commands, nothing else. Exit: 0 done, 1 done with findings that need a look, 2 refused to start or to go on."""

from __future__ import annotations

import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn, TransferSpeedColumn

from fhiro2 import __version__
from fhiro2.cli import live
from fhiro2.cli.options import (
    AsJson,
    MappingFile,
    RulesFolder,
    SettingsFile,
    mapping_in,
    pack_in,
    print_json,
    settings_in,
)
from fhiro2.errors import Fhiro2Error, StopError

if TYPE_CHECKING:
    from fhiro2.read.ndjson import NdjsonSource

PURPOSE = (
    "Oxygen transport from FHIR Observations, for review by trained staff. Exit: 0 done, 1 done with findings that "
    "need a look, 2 refused to start or to go on."
)
app = typer.Typer(
    no_args_is_help=True, add_completion=False, rich_markup_mode=None, pretty_exceptions_enable=False, help=PURPOSE
)
rules_app = typer.Typer(no_args_is_help=True, help="Check the rules, and tell what they do.")

PASSES = 2  # sources are read twice: context first
QUIET_SECONDS = 2  # what ends sooner shows no progress
INTENDED_USE = (
    "fhiro2 reads Observations that a hospital already keeps, computes oxygen-transport values with their "
    "uncertainty, and raises flags for review by trained staff."
)
EXCLUSIONS = (
    "It is not an alarm and not a monitor; it orders nothing and doses nothing.",
    "Adult defaults; pregnancy, children, cyanotic heart disease, ECMO and altitude need rules of their own.",
    "Absence of a flag is not evidence that all is well: a value may be missing, late or quarantined.",
    "Rules and limits are defaults for local review. Local policy and licensed practice decide.",
)

Inputs = Annotated[list[str], typer.Argument(help="files or folders of NDJSON; NAME=PATH names the source")]


@app.command()
def demo(
    once: Annotated[bool, typer.Option("--once", help="print the summary and end")] = False,
    out: Annotated[Path | None, typer.Option("--out", help="keep the files here")] = None,
) -> None:
    """Run everything on the built-in synthetic ward."""
    from fhiro2.demonstration import run_demo

    if not once:
        raise StopError("demo without --once needs the review page, which this version does not have; add --once")
    with tempfile.TemporaryDirectory() as scratch:
        run_demo(Console(), out or Path(scratch))


@app.command()
def replay(
    inputs: Inputs,
    out: Annotated[Path, typer.Option("--out", help="folder for what is written")],
    settings: SettingsFile = None,
    mapping: MappingFile = None,
    rules: RulesFolder = None,
    as_json: AsJson = False,
) -> None:
    """Send past resources through the whole way, into files."""
    from fhiro2.replay import replay as run
    from fhiro2.terminal import show_account, show_derived

    given = settings_in(settings), mapping_in(mapping), pack_in(rules)
    with _reading(inputs) as (sources, advance):
        account = run(sources, out, *given, lambda _, share: advance.computed(share)).as_json()
    if as_json:
        print_json(account)
    else:
        console = Console()
        show_account(console, account)
        show_derived(console, account)
        console.print(f"\nFlags for review: {account['flags_raised']}. Written to {out}.", highlight=False)
    look = account["quarantined"] or account["parts_quarantined"] or account["patients_held"]
    raise typer.Exit(1 if look else 0)


@app.command()
def census(
    inputs: Inputs,
    settings: SettingsFile = None,
    mapping: MappingFile = None,
    rules: RulesFolder = None,
    as_json: AsJson = False,
) -> None:
    """Say what a feed holds, which values it allows, and what is missing most."""
    from fhiro2.census import census as run
    from fhiro2.terminal import show_census

    given = settings_in(settings), mapping_in(mapping), pack_in(rules)
    with _reading(inputs) as (sources, _):
        found = run(sources, *given)
    if as_json:
        print_json(found.as_json())
    else:
        show_census(Console(), found)


app.command()(live.run)
app.command()(live.account)
app.add_typer(rules_app, name="rules")
app.add_typer(live.quarantine_app, name="quarantine")
app.add_typer(live.written_app, name="written")


@rules_app.command("check")
def rules_check(
    folder: Annotated[Path | None, typer.Argument(help="folder of rules; the shipped ones without it")] = None,
) -> None:
    """Load every rule strictly and run its cases."""
    from fhiro2.judge import check_pack
    from fhiro2.packaged import rules_folder

    report = check_pack(folder or rules_folder(), datetime.now(UTC).date())
    console = Console()
    for line in report.lines():
        console.print(line, highlight=False, markup=False)
    raise typer.Exit(2 if report.failed else 1 if report.warned else 0)


@rules_app.command("show")
def rules_show(
    rule: Annotated[str | None, typer.Argument(help="id of one rule; all of them without it")] = None,
    rules: RulesFolder = None,
) -> None:
    """Tell what the rules do, in words made from the rules themselves."""
    from fhiro2.judge.words import told

    found = [one for one in pack_in(rules).rules if rule in (None, one.id)]
    if not found:
        raise StopError(f"no rule {rule!r} in this pack; `fhiro2 rules show` tells all of them")
    console = Console()
    for one in found:
        title, *lines = told(one)
        console.print(f"\n{title}", style="bold", highlight=False, markup=False)
        for line in lines:
            console.print(line, highlight=False, markup=False)


@app.command()
def about() -> None:
    """Intended use, exclusions, versions, and which evaluators run."""
    import platform
    from importlib.metadata import version

    from fhiro2.codes import LOINC_NOTICE, code_table
    from fhiro2.judge import chain_of

    console = Console()
    pack = pack_in(None)
    console.print(f"fhiro2 {__version__}", highlight=False)
    console.print(f"\n{INTENDED_USE}\n", highlight=False)
    for line in EXCLUSIONS:
        console.print(f"  {line}", highlight=False)
    console.print(f"\nrules: {len(pack.rules)} in pack {pack.hash[:12]}; codes: {len(code_table())}", highlight=False)
    versions = ", ".join(f"{name} {version(name)}" for name in ("fhir.resources", "msgspec", "numpy", "pydantic"))
    console.print(f"runs on Python {platform.python_version()}, {versions}", highlight=False)
    console.print(f"evaluators: {evaluators(chain_of(pack.rules).evaluators)}", highlight=False)
    console.print(f"\n{LOINC_NOTICE}", style="dim", highlight=False)


def evaluators(names: tuple[str, ...]) -> str:
    """Which evaluators decide what is flagged, in words; ``names`` are those that chain findings to flags."""
    if len(names) > 1:
        return f"conditions by the built-in one; flags from findings by {' and '.join(names)}, which must agree"
    return f"conditions and flags by the {names[0]} one alone; durable-rules is not installed or cannot be loaded"


@contextmanager
def _reading(inputs: list[str]) -> Iterator[tuple[list[NdjsonSource], _Advance]]:
    """The named sources, with progress on standard error once reading takes longer than two seconds."""
    from fhiro2.read.ndjson import NdjsonSource

    with _progress() as advance:
        grouped: dict[str, list[Path]] = {}
        for text in inputs:
            name, found, path = text.partition("=")
            named = found and "/" not in name
            grouped.setdefault(name if named else "feed", []).append(Path(path if named else text))
        sources = [NdjsonSource(name, paths, advance) for name, paths in grouped.items()]
        advance.total = PASSES * sum(source.size() for source in sources)
        yield sources, advance


class _Advance:
    """Shows how far reading and then computing are, once two seconds have passed."""

    def __init__(self, progress: Progress) -> None:
        self.total = 0
        self._progress = progress
        self._started = time.monotonic()
        self._done = 0
        self._tasks: dict[str, Any] = {}

    def __call__(self, size: int) -> None:
        """Note ``size`` more bytes read."""
        self._done += size
        self._show("reading", self._done, self.total)

    def computed(self, share: float) -> None:
        """Note the share of the readings that is computed and written."""
        self._show("computing", share * self.total, self.total)

    def _show(self, task: str, done: float, total: int) -> None:
        if task not in self._tasks:
            if time.monotonic() - self._started < QUIET_SECONDS:
                return
            self._progress.start()
            self._tasks[task] = self._progress.add_task(task, total=total)
        self._progress.update(self._tasks[task], completed=done)


@contextmanager
def _progress() -> Iterator[_Advance]:
    progress = Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        TransferSpeedColumn(),
        TimeRemainingColumn(),
        console=Console(stderr=True),
        transient=True,
    )
    try:
        yield _Advance(progress)
    except KeyboardInterrupt:
        raise StopError("stopped by the keyboard; nothing half-written is left, run it again") from None
    finally:
        progress.stop()


def main() -> None:
    """Run a command; errors say what happened and what to do, and end with 2."""
    try:
        app()
    except Fhiro2Error as error:
        sys.stderr.write(f"fhiro2: {error}\n")
        raise SystemExit(2) from None
