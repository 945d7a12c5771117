"""Commands about protocol documents."""

import json
import sys
from pathlib import Path
from typing import Any

import click

from fieldapp.cli.shared import NO, json_option, main


@main.group()
def protocol() -> None:
    """Protocols: list those shipped, check one of your own."""


@protocol.command("list")
@json_option
def protocol_list(as_json: bool) -> None:
    """List the shipped protocols.

    Example: tapwitness protocol list --json
    """
    from fieldapp.domain.protocols import shipped

    rows = [
        {
            "id": one.id, "title": one.title, "source": one.source,
            "in_force": {"from": _iso(one.in_force_from), "to": _iso(one.in_force_to)},
            "sha256": one.sha256,
        }
        for one in shipped().values()
    ]  # fmt: skip
    if as_json:
        click.echo(json.dumps(rows, ensure_ascii=False))
        return
    for row in rows:
        click.echo(f"{row['id']:<20} {row['title']} ({row['source']})")


def _iso(day: Any) -> str | None:
    return day.isoformat() if day else None


@protocol.command("check")
@click.argument("file", type=click.Path(exists=True, dir_okay=False, path_type=Path))
def protocol_check(file: Path) -> None:
    """Check a protocol document (TOML) of a local authority's own.

    Example: tapwitness protocol check ours.toml
    """
    from fieldapp.domain.protocols import BadProtocol, read_protocol

    try:
        found = read_protocol(file.read_text("utf-8"))
    except UnicodeDecodeError:
        click.echo(f"{file.name}: the file is not UTF-8 text. Save it as UTF-8.", err=True)
        sys.exit(NO)
    except BadProtocol as fault:
        for one in fault.faults:
            at = f", line {one.line}" if one.line else ""
            click.echo(f"{file.name}: {one.path}{at}: {one.value!r} - {one.right}", err=True)
        sys.exit(NO)
    click.echo(f"{found.id}: {len(found.steps)} steps, sha256 {found.sha256}")
