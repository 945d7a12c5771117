"""Commands that look at the record."""

import json
import sys
from pathlib import Path

import click

from fieldapp.cli.shared import NO, folder_option, json_option, main


@main.command()
@folder_option
@json_option
def verify(folder: Path, as_json: bool) -> None:
    """Check every entry, hash, signature, chain and the anchor of a folder; change no byte.

    Example: tapwitness verify --data tablet
    """
    from sync.entry import Realm
    from sync.verify import verify_folder

    report = verify_folder(folder, Realm("tapwitness"))
    fault = report.first_fault
    if as_json:
        first = {"log": fault.log, "seq": fault.seq, "says": fault.says} if fault else None
        click.echo(json.dumps({
            "chain": "broken" if fault else "intact", "entries": report.entries,
            "logs": report.logs, "photos": report.blobs, "first_fault": first,
        }))  # fmt: skip
    elif fault is None:
        photos = f", {report.blobs} photos" if report.blobs else ""
        click.echo(f"{report.entries} entries in {report.logs} logs{photos}: every one holds.")
    if fault is not None:
        place = f"log {fault.log}, entry {fault.seq}: " if fault.log else ""
        click.echo(f"{place}{fault.says}", err=True)
        sys.exit(NO)


@main.command()
@folder_option
def rebuild(folder: Path) -> None:
    """Make the page tables anew from the record.

    Example: tapwitness rebuild --data central
    """
    from fieldapp.store import Store

    with Store.open(folder) as store:
        click.echo(f"{store.rebuild()} entries read.")
