"""Commands that rehearse."""

import json
import sys
from pathlib import Path

import click

from fieldapp.cli.shared import NO, end_in_order, json_option, main


@main.command()
@click.argument(
    "route", required=False, type=click.Path(exists=True, dir_okay=False, path_type=Path)
)
@json_option
@click.option("--keep", type=click.Path(file_okay=False, path_type=Path), default=None,
              help="Leave FOLDER/central and FOLDER/tablet.")  # fmt: skip
def rehearse(route: Path | None, as_json: bool, keep: Path | None) -> None:
    """Walk a route headless between throwaway nodes over real HTTP and say what each place saw.

    Example: tapwitness rehearse --json
    """
    from fieldapp.rehearsal import rehearse as walk

    end_in_order()
    account = walk(route, keep=keep, say=lambda line: click.echo(line, err=True))
    if as_json:
        click.echo(json.dumps(account.as_json(), ensure_ascii=False))
    else:
        click.echo(account.in_words())
    if not account.good:
        sys.exit(NO)


@main.command()
@click.option("--keep", type=click.Path(file_okay=False, path_type=Path), default=None,
              help="Keep FOLDER/central and FOLDER/tablet, and go on there.")  # fmt: skip
def demo(keep: Path | None) -> None:
    """Show an invented town: its central, a tablet, and the line between them, to be cut.

    Today's route waits on the tablet, last year's round is finished. Ctrl-C ends all of it.

    Example: tapwitness demo
    """
    from fieldapp.rehearsal.demo import show

    end_in_order()
    sys.exit(show(keep=keep, say=lambda line: click.echo(line)))
