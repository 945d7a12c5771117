"""Commands that run nodes and join them."""

import json
import sys
from pathlib import Path

import click

from fieldapp.cli.shared import NO, folder_option, handed, json_option, main, run_node_of


@main.command()
@folder_option
@click.option("--port", type=click.IntRange(1, 65535), default=None, help="Port on 127.0.0.1.")
def serve(folder: Path, port: int | None) -> None:
    """Run the node of a folder and serve its pages on this machine alone.

    Example: tapwitness serve --data tablet
    """
    from fieldapp.running import open_to_serve

    with open_to_serve(folder) as store:
        if not store.get("places"):
            with store.transaction():
                store.put("places", "kitchen bench desk")
        run_node_of(store, port=port or 0, door=store.get("central") == "yes")


@main.command()
@folder_option
@click.option("--port", type=click.IntRange(1, 65535), default=None, help="Port on 127.0.0.1.")
@click.option("--invite", "person", default="", help="Print a one-time code for that person.")
@click.option("--listen", default="", help="ADDRESS:PORT that opens /sync to others, never a page.")
@click.option("--certificate", default="", help="PEM file for --listen.")
@click.option("--key", default="", help="PEM file of the certificate's private key.")
@json_option
def central(
    folder: Path,
    port: int | None,
    person: str,
    listen: str,
    certificate: str,
    key: str,
    as_json: bool,
) -> None:
    """Run a central: Desk, Bench, and the door that devices send to.

    With --invite: print a code that enrols one device of that person, within ten minutes, and end.

    \b
    Examples:
      tapwitness central --data central
      tapwitness central --data central --invite sampler-1
    """
    from fieldapp.nodes import become_central
    from fieldapp.running import open_to_serve

    if person:
        _invite(folder, person, as_json)
        return
    with open_to_serve(folder) as store:
        become_central(store)
        run_node_of(
            store, port=port or 0, door=True, listen=listen, certificate=certificate, key=key
        )


def _invite(folder: Path, person: str, as_json: bool) -> None:
    answer = handed(folder, "invite", {"person": person})
    if as_json:
        click.echo(json.dumps(answer))
        return
    click.echo(answer["code"])
    click.echo(f"for {answer['person']}, one device, until {answer['until'][11:16]} UTC", err=True)


@main.command()
@click.argument("url")
@click.argument("code")
@folder_option
def enrol(url: str, code: str, folder: Path) -> None:
    """Enrol this device at a central with a one-time code.

    Example: tapwitness enrol https://central.example:8443 7F3K2QX-9ZT4B1C --data tablet
    """
    answer = handed(folder, "enrol", {"url": url, "code": code})
    click.echo(f"Enrolled at {answer['central']} for {answer['person']}.", err=True)


@main.command()
@folder_option
@json_option
def sync(folder: Path, as_json: bool) -> None:
    """Send what waits and fetch what is granted.

    Example: tapwitness sync --data tablet
    """
    answer = handed(folder, "sync", {})
    if as_json:
        click.echo(json.dumps(answer))
    else:
        click.echo(
            f"Sent {answer['pushed']}, fetched {answer['pulled']}, waiting {answer['waiting']};"
            f" photos sent {answer['photos']}, waiting {answer['photos_waiting']}."
        )
    for line in (*answer["refused"], *filter(None, [answer["photos_say"]])):
        click.echo(line, err=True)
    if answer["waiting"] or answer["refused"] or answer["photos_waiting"]:
        sys.exit(NO)
