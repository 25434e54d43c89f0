"""Commands beside a FHIR server: the worker, and what its store (or a replay's folder) says."""

from __future__ import annotations

import json
from dataclasses import asdict
from pathlib import Path
from typing import Annotated, Any

import typer
from rich.console import Console

from fhiro2.cli.options import AsJson, MappingFile, RulesFolder, mapping_in, pack_in, print_json, settings_in
from fhiro2.errors import StopError

quarantine_app = typer.Typer(no_args_is_help=True, help="Look at what could not be used.")
written_app = typer.Typer(no_args_is_help=True, help="Look at what was written to the server, or take it back.")

SiteFile = Annotated[
    Path,
    typer.Option("--settings", envvar="FHIRO2_SETTINGS", help="settings of the site (YAML), with its server"),
]
InFolder = Annotated[Path | None, typer.Option("--in", help="folder that a replay wrote")]
InStore = Annotated[Path | None, typer.Option("--store", help="store of `fhiro2 run`")]
OfStore = Annotated[Path, typer.Option("--store", help="store of `fhiro2 run`")]


def run(
    settings: SiteFile,
    once: Annotated[bool, typer.Option("--once", help="one cycle, then end")] = False,
    mapping: MappingFile = None,
    rules: RulesFolder = None,
    as_json: AsJson = False,
) -> None:
    """Work beside a FHIR server: read what is new, compute, and write it back.

    Nothing is written, and what would be is said and kept, until the settings say `write: true`. A bearer token comes
    from the settings' server.token_file or from FHIRO2_TOKEN. Ended anywhere, the next run goes on where it stood.
    """
    from fhiro2.live import run_once
    from fhiro2.terminal import show_cycle

    if not once:
        raise StopError("run without --once would go on for ever, which this version does not do; add --once")
    site = settings_in(settings)
    done = run_once(site, mapping_in(mapping), pack_in(rules))
    if as_json:
        print_json(asdict(done))
    else:
        show_cycle(Console(), done, writing=site.write)
    raise typer.Exit(1 if done.dead or done.held or done.notices else 0)


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
        print_json(found)
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
        print_json([{key: value for key, value in line.items() if key != "raw"} for line in lines])
    else:
        show_quarantine(Console(), lines)
    raise typer.Exit(1 if lines else 0)


@quarantine_app.command("show")
def quarantine_show(row: Annotated[int, typer.Argument(help="row of the list")], store: OfStore) -> None:
    """Print one quarantined resource as it came, for staff who may see it."""
    from fhiro2.live import store_at

    with store_at(store) as opened, opened.transaction() as work:
        content = work.content(row)
    if content is None:
        raise StopError(f"{store}: no kept resource in row {row}; `fhiro2 quarantine list --store {store}` lists them")
    typer.echo(content)


@quarantine_app.command("retry")
def quarantine_retry(store: OfStore) -> None:
    """Let the next cycle try all quarantined resources again, for example after a new mapping."""
    from fhiro2.live import store_at

    with store_at(store) as opened, opened.transaction() as work:
        number = work.try_again()
    Console().print(f"{number} resources are tried again in the next cycle", highlight=False)


@written_app.command("list")
def written_list(store: OfStore, as_json: AsJson = False) -> None:
    """List what the server is known to hold of ours, and what still waits to be written."""
    from fhiro2.live import store_at
    from fhiro2.terminal import show_written

    with store_at(store) as opened, opened.transaction() as work:
        written, waiting = work.written(), work.outbox()
    if as_json:
        rows = [(one.reference, one.state, one.etag, "") for one in written]
        rows += [(one.reference, one.state, "", one.problem) for one in waiting]
        print_json([dict(zip(("reference", "state", "etag", "problem"), row, strict=True)) for row in rows])
    else:
        show_written(Console(), written, waiting)
    raise typer.Exit(1 if any(one.problem for one in waiting) else 0)


@written_app.command("retract")
def written_retract(
    settings: SiteFile, mapping: MappingFile = None, rules: RulesFolder = None, as_json: AsJson = False
) -> None:
    """Take back everything of ours that the server holds.

    Each value and flag is written again as entered in error, with a Provenance that says since when. Needs
    `write: true`. The next `fhiro2 run` computes all patients again, and with `write: true` writes anew what then
    stands: before it, correct what was wrong, or take `write: true` out of the settings.
    """
    from fhiro2.live import retract
    from fhiro2.terminal import show_retraction

    done = retract(settings_in(settings), mapping_in(mapping), pack_in(rules))
    if as_json:
        print_json(asdict(done))
    else:
        show_retraction(Console(), done)
    raise typer.Exit(1 if done.dead or done.waiting or done.notices else 0)


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
