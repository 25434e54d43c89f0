"""Commands, nothing else. Exit: 0 done, 1 done with findings that need a look, 2 refused to start or to go on."""

from __future__ import annotations

import json
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn, TransferSpeedColumn

from fhiro2 import __version__
from fhiro2.errors import Fhiro2Error, StopError

if TYPE_CHECKING:
    from fhiro2.judge import Pack
    from fhiro2.read.ndjson import NdjsonSource
    from fhiro2.settings import Mapping, Settings

app = typer.Typer(
    no_args_is_help=True, add_completion=False, rich_markup_mode=None, pretty_exceptions_enable=False, help=__doc__
)
rules_app = typer.Typer(no_args_is_help=True, help="Check the rules, and tell what they do.")
quarantine_app = typer.Typer(no_args_is_help=True, help="Look at what could not be used.")
written_app = typer.Typer(no_args_is_help=True, help="Look at what was written to the server.")
app.add_typer(rules_app, name="rules")
app.add_typer(quarantine_app, name="quarantine")
app.add_typer(written_app, name="written")

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
SettingsFile = Annotated[Path | None, typer.Option("--settings", help="settings of the site (YAML)")]
MappingFile = Annotated[Path | None, typer.Option("--mapping", help="signed mapping of the site (YAML)")]
RulesFolder = Annotated[Path | None, typer.Option("--rules", help="folder of rules; the shipped ones without it")]
AsJson = Annotated[bool, typer.Option("--json", help="print JSON for machines")]
InFolder = Annotated[Path | None, typer.Option("--in", help="folder that a replay wrote")]
InStore = Annotated[Path | None, typer.Option("--store", help="store of `fhiro2 run`")]


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

    given = _settings(settings), _mapping(mapping), _pack(rules)
    with _reading(inputs) as (sources, advance):
        account = run(sources, out, *given, lambda _, share: advance.computed(share)).as_json()
    if as_json:
        _print_json(account)
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

    given = _settings(settings), _mapping(mapping), _pack(rules)
    with _reading(inputs) as (sources, _):
        found = run(sources, *given)
    if as_json:
        _print_json(found.as_json())
    else:
        show_census(Console(), found)


@app.command()
def run(
    settings: Annotated[Path, typer.Option("--settings", help="settings of the site (YAML), with its server")],
    once: Annotated[bool, typer.Option("--once", help="one cycle, then end")] = False,
    mapping: MappingFile = None,
    rules: RulesFolder = None,
    as_json: AsJson = False,
) -> None:
    """Work beside a FHIR server: read what is new, compute, and write what the settings allow."""
    from fhiro2.live import run_once
    from fhiro2.terminal import show_cycle

    if not once:
        raise StopError("run without --once would go on for ever, which this version does not do; add --once")
    site = _settings(settings)
    done = run_once(site, _mapping(mapping), _pack(rules))
    if as_json:
        _print_json(asdict(done))
    else:
        show_cycle(Console(), done, writing=site.write)
    raise typer.Exit(1 if done.dead or done.held or done.notices else 0)


@app.command()
def account(folder: InFolder = None, store: InStore = None, as_json: AsJson = False) -> None:
    """Show the account of a replay or of a store."""
    from fhiro2.terminal import show_account, show_derived

    if _one_of(folder, store) is store and store is not None:
        from fhiro2.live import account_of, store_at

        with store_at(store) as opened:
            found = account_of(opened)
    else:
        found = _load(Path(folder or "") / "account.json")
    if as_json:
        _print_json(found)
    else:
        show_account(Console(), found)
        if folder is not None:
            show_derived(Console(), found)


@quarantine_app.command("list")
def quarantine_list(folder: InFolder = None, store: InStore = None, as_json: AsJson = False) -> None:
    """List the quarantined resources of a replay or of a store."""
    from fhiro2.terminal import show_quarantine

    if _one_of(folder, store) is store and store is not None:
        from fhiro2.live import store_at

        with store_at(store) as opened, opened.transaction() as work:
            lines = work.quarantined()
    else:
        lines = _quarantined(Path(folder or "") / "quarantine.ndjson")
    if as_json:
        _print_json([{key: value for key, value in line.items() if key != "raw"} for line in lines])
    else:
        show_quarantine(Console(), lines)
    raise typer.Exit(1 if lines else 0)


@quarantine_app.command("show")
def quarantine_show(
    row: Annotated[int, typer.Argument(help="row of the list")],
    store: Annotated[Path, typer.Option("--store", help="store of `fhiro2 run`")],
) -> None:
    """Print one quarantined resource as it came, for staff who may see it."""
    from fhiro2.live import store_at

    with store_at(store) as opened, opened.transaction() as work:
        content = work.content(row)
    if content is None:
        raise StopError(f"{store}: no kept resource in row {row}; `fhiro2 quarantine list --store {store}` lists them")
    typer.echo(content)


@quarantine_app.command("retry")
def quarantine_retry(store: Annotated[Path, typer.Option("--store", help="store of `fhiro2 run`")]) -> None:
    """Let the next cycle try all quarantined resources again, for example after a new mapping."""
    from fhiro2.live import store_at

    with store_at(store) as opened, opened.transaction() as work:
        number = work.try_again()
    Console().print(f"{number} resources are tried again in the next cycle", highlight=False)


@written_app.command("list")
def written_list(
    store: Annotated[Path, typer.Option("--store", help="store of `fhiro2 run`")], as_json: AsJson = False
) -> None:
    """List what the server is known to hold of ours, and what still waits to be written."""
    from fhiro2.live import store_at
    from fhiro2.terminal import show_written

    with store_at(store) as opened, opened.transaction() as work:
        written, waiting = work.written(), work.outbox()
    if as_json:
        rows = [(one.reference, one.state, one.etag, "") for one in written]
        rows += [(one.reference, one.state, "", one.problem) for one in waiting]
        _print_json([dict(zip(("reference", "state", "etag", "problem"), row, strict=True)) for row in rows])
    else:
        show_written(Console(), written, waiting)
    raise typer.Exit(1 if any(one.problem for one in waiting) else 0)


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

    found = [one for one in _pack(rules).rules if rule in (None, one.id)]
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
    pack = _pack(None)
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


def _settings(path: Path | None) -> Settings:
    from fhiro2.settings import Settings, read_settings

    return read_settings(path) if path else Settings()


def _mapping(path: Path | None) -> Mapping:
    from fhiro2.settings import NO_MAPPING, read_mapping

    return read_mapping(path) if path else NO_MAPPING


def _pack(folder: Path | None) -> Pack:
    from fhiro2.judge import read_pack
    from fhiro2.packaged import rules_folder

    return read_pack(folder or rules_folder())


def _one_of(folder: Path | None, store: Path | None) -> Path | None:
    """The one that is given; raises StopError for none or both."""
    if (folder is None) == (store is None):
        raise StopError("name either the folder of a replay (--in) or a store (--store)")
    return folder or store


def _quarantined(path: Path) -> list[dict[str, Any]]:
    try:
        return [json.loads(line) for line in path.read_text(encoding="utf-8").splitlines()]
    except (OSError, ValueError):
        raise StopError(f"{path}: cannot be read; name the folder that a replay wrote") from None


def _load(path: Path) -> dict[str, Any]:
    try:
        found: dict[str, Any] = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        raise StopError(f"{path}: cannot be read; name the folder that a replay wrote") from None
    return found


def _print_json(content: Any) -> None:
    sys.stdout.write(json.dumps(content, indent=2) + "\n")


def main() -> None:
    """Run a command; errors say what happened and what to do, and end with 2."""
    try:
        app()
    except Fhiro2Error as error:
        sys.stderr.write(f"fhiro2: {error}\n")
        raise SystemExit(2) from None
