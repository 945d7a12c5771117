"""The command line. Exit 0 done, 1 the answer is no, 2 wrong use; errors are one sentence.

Heavy parts are imported by the command that needs them, so that ``--help`` and a tablet's start
stay quick.
"""

import base64
import json
import signal
import sys
import threading
from collections.abc import Callable
from pathlib import Path
from typing import Any, NoReturn

import click

NO = 1


class Sentences(click.Group):
    """Turns known refusals into their sentences and exit 1."""

    def invoke(self, ctx: click.Context) -> Any:
        """Run the command; say what stands against it."""
        try:
            return super().invoke(ctx)
        except (click.ClickException, click.exceptions.Exit, click.Abort):
            raise
        except Exception as fault:
            from fieldapp.running import HandedBack
            from fieldapp.work.faults import said_of

            said = (
                {"lines": fault.lines, "known": fault.known}
                if isinstance(fault, HandedBack)
                else said_of(fault)
            )
            if not said["known"]:
                raise
            for line in said["lines"]:
                click.echo(line, err=True)
            ctx.exit(NO)


def folder_option(command: Callable[..., Any]) -> Callable[..., Any]:
    """Give a command ``--data FOLDER``."""
    return click.option(
        "--data",
        "folder",
        type=click.Path(file_okay=False, path_type=Path),
        default=None,
        help="The node's data folder (else the user's own).",
        callback=lambda _ctx, _param, value: value or _default_folder(),
    )(command)


def json_option(command: Callable[..., Any]) -> Callable[..., Any]:
    """Give a command ``--json``: then standard output holds that JSON and nothing else."""
    return click.option("--json", "as_json", is_flag=True, help="Print JSON and nothing else.")(
        command
    )


def _default_folder() -> Path:
    from fieldapp.settings import default_folder

    return default_folder()


@click.group(cls=Sentences, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="tapwitness")
def main() -> None:
    """Sample drinking water for lead at the tap: protocol, custody, the rule's arithmetic."""


# nodes


@main.command()
@folder_option
@click.option("--port", type=click.IntRange(1, 65535), default=None, help="Port on 127.0.0.1.")
def serve(folder: Path, port: int | None) -> None:
    """Run the node of a folder and serve its pages on this machine alone.

    Example: tapwitness serve --data tablet
    """
    from fieldapp.store import Store

    with Store.open(folder) as store:
        if not store.get("places"):
            with store.transaction():
                store.put("places", "kitchen bench desk")
        _run(store, port=port or 0, door=store.get("central") == "yes")


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
    from fieldapp.store import Store

    if person:
        _invite(folder, person, as_json)
        return
    with Store.open(folder) as store:
        become_central(store)
        _run(store, port=port or 0, door=True, listen=listen, certificate=certificate, key=key)


def _invite(folder: Path, person: str, as_json: bool) -> None:
    answer = _handed(folder, "invite", {"person": person})
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
    answer = _handed(folder, "enrol", {"url": url, "code": code})
    click.echo(f"Enrolled at {answer['central']} for {answer['person']}.", err=True)


@main.command()
@folder_option
@json_option
def sync(folder: Path, as_json: bool) -> None:
    """Send what waits and fetch what is granted.

    Example: tapwitness sync --data tablet
    """
    answer = _handed(folder, "sync", {})
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


# plan, labels, results


@main.group("round")
def round_() -> None:
    """Rounds: import them from a file."""


@round_.command("import")
@click.argument("file", type=click.Path(exists=True, dir_okay=False, path_type=Path))
@folder_option
@click.option("--amend", is_flag=True, help="Append the differences of a known round.")
@json_option
def round_import(file: Path, folder: Path, amend: bool, as_json: bool) -> None:
    """Import a round file (JSON): sites, routes, visits, planned bottles.

    Example: tapwitness round import spring.json --data central
    """
    answer = _import_round(folder, file, amend)
    if as_json:
        click.echo(json.dumps(answer, ensure_ascii=False))
    elif not answer["known"] or answer["facts"]:
        click.echo(f"Round {answer['round']}: {answer['facts']} entries recorded.")
    elif not answer["changes"]:
        click.echo(f"Round {answer['round']} is known and the file changes nothing.")
    _stop_at_differences(answer)


def _import_round(folder: Path, file: Path, amend: bool) -> dict[str, Any]:
    """Import a round file and say what is worth knowing of it."""
    asked = {"file": file.name, "data": _raw(file), "amend": amend}
    answer = _handed(folder, "round-import", asked)
    for line in [*answer["notes"], *answer["changes"]]:
        click.echo(line, err=True)
    return answer


def _stop_at_differences(answer: dict[str, Any]) -> None:
    """End with exit 1 where a file of a known round differs and nobody said --amend."""
    if answer["changes"] and not answer["amended"]:
        click.echo(
            f"The round {answer['round']} is known and this file differs. Nothing was recorded: "
            "look at the lines above, then import it with --amend.",
            err=True,
        )
        sys.exit(NO)


@main.group()
def results() -> None:
    """Results: import a laboratory's file."""


@results.command("import")
@click.argument("file", type=click.Path(exists=True, dir_okay=False, path_type=Path))
@folder_option
@json_option
def results_import(file: Path, folder: Path, as_json: bool) -> None:
    """Import results (CSV): bottle or laboratory number, analyte, value or <limit, unit.

    Example: tapwitness results import batch-7.csv --data central
    """
    answer = _handed(folder, "results-import", {"file": file.name, "data": _raw(file)})
    for line in answer["notes"]:
        click.echo(line, err=True)
    if as_json:
        click.echo(json.dumps(answer, ensure_ascii=False))
        return
    click.echo(
        f"{answer['rows']} rows for {answer['bottles']} bottles: "
        f"{answer['facts']} entries recorded."
    )


@main.command()
@click.argument("route", required=False)
@click.option("-o", "--output", type=click.Path(dir_okay=False, path_type=Path), default=None)
@click.option("--spare", type=click.IntRange(0, 500), default=0, help="How many spares in all.")
@click.option(
    "--sheet", default="", help="e.g. 3x10,66.7x25.4,left=4.8,top=12.7,gap=3.2x0,page=letter"
)
@click.option("--roll", default="", help="One label a page, e.g. 62x29")
@click.option("--check", "code", default="", help="Say whether a code's check character is right.")
@folder_option
@json_option
def labels(
    route: str | None,
    output: Path | None,
    spare: int,
    sheet: str,
    roll: str,
    code: str,
    folder: Path,
    as_json: bool,
) -> None:
    """Print a route's bottle labels as PDF. ROUTE is an id, or a round file (imported first).

    \b
    Examples:
      tapwitness labels north-2 -o labels.pdf --spare 4 --data central
      tapwitness labels --check 2HB4-X90T-C7T
    """
    if code:
        _check_code(code)
    if not route or output is None:
        raise click.UsageError("Name a ROUTE and an output file: labels ROUTE -o FILE.pdf")
    for name in _routes_of(folder, route):
        asked = {"route": name, "spare": spare, "sheet": sheet, "roll": roll}
        answer = _handed(folder, "labels", asked)
        target = output if name == route else _beside(output, name, route)
        _write(target, base64.b64decode(answer.pop("pdf")))
        if as_json:
            click.echo(json.dumps(answer))
        else:
            click.echo(f"{target}: {len(answer['codes'])} labels, {answer['issued']} codes issued.")


@main.command()
@click.argument("cooler")
@click.option("-o", "--output", type=click.Path(dir_okay=False, path_type=Path), required=True)
@click.option("--route", default="", help="The route, where a box of that number is on several.")
@folder_option
@json_option
def custody(cooler: str, output: Path, route: str, folder: Path, as_json: bool) -> None:
    """Print a cooler's custody record for its lid as PDF. COOLER is an id, or a box's number.

    \b
    Examples:
      tapwitness custody 3 --route north-2 -o lid.pdf --data tablet
      tapwitness custody C-7F3K2Q -o lid.pdf --data central
    """
    answer = _handed(folder, "custody", {"cooler": cooler, "route": route})
    _write(output, base64.b64decode(answer.pop("pdf")))
    if as_json:
        click.echo(json.dumps(answer))
    else:
        click.echo(f"{output}: cooler {answer['cooler']}, {answer['bottles']} bottles.")


def _routes_of(folder: Path, route: str) -> list[str]:
    """Return the route ids meant: the one named, or those of a round file."""
    file = Path(route)
    if not (file.suffix == ".json" and file.is_file()):
        return [route]
    from fieldapp.reading.rounds import read_round

    found = read_round(file.read_bytes(), file.name)
    _stop_at_differences(_import_round(folder, file, False))
    walked = {visit.route for visit in found.visits}
    return [planned.route for planned in found.routes if planned.route in walked]


def _beside(output: Path, name: str, asked: str) -> Path:
    """Return the file for one of a round file's routes; the very name asked for a lone route."""
    from fieldapp.reading.rounds import read_round

    routes = read_round(Path(asked).read_bytes(), asked).routes
    return output if len(routes) == 1 else output.with_stem(f"{output.stem}-{name}")


def _check_code(code: str) -> NoReturn:
    from fieldapp.domain.codes import BadCode, grouped, normalise

    try:
        click.echo(f"{grouped(normalise(code))} is a bottle code.")
    except BadCode as fault:
        from fieldapp.work.faults import said_of

        click.echo(said_of(fault)["lines"][0], err=True)
        sys.exit(NO)
    sys.exit(0)


# evidence


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


# rehearsal


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

    _end_in_order()
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

    _end_in_order()
    sys.exit(show(keep=keep, say=lambda line: click.echo(line)))


# shared


def _run(store: Any, **options: Any) -> None:
    from fieldapp.running import serve as run_node

    def ready(running: Any) -> None:
        click.echo(f"{running.url}/")
        sys.stdout.flush()

    _end_in_order(0)
    run_node(store, ready=ready, **options)


def _end_in_order(code: int = NO) -> None:
    """Let SIGTERM end the command as Ctrl-C does: what it opened is closed, its nodes end."""

    def end(_signal: int, _frame: Any) -> NoReturn:
        raise SystemExit(code)

    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGTERM, end)


def _handed(folder: Path, name: str, asked: dict[str, Any]) -> dict[str, Any]:
    from rich.console import Console
    from rich.progress import Progress

    from fieldapp.running import hand_over

    console = Console(stderr=True)
    with Progress(console=console, transient=True, disable=not console.is_terminal) as bar:
        lines: dict[str, Any] = {}

        def progress(what: str, done: int, of: int) -> None:
            if what not in lines:
                lines[what] = bar.add_task(what, total=of or None)
            bar.update(lines[what], completed=done, total=of or None)

        return hand_over(folder, name, asked, progress)


def _raw(file: Path) -> str:
    return base64.b64encode(file.read_bytes()).decode()


def _write(path: Path, data: bytes) -> None:
    half = path.with_name(path.name + ".part")
    try:
        half.write_bytes(data)
        half.replace(path)
    except OSError as fault:
        half.unlink(missing_ok=True)
        raise click.ClickException(f"{path} cannot be written: {fault.strerror}.") from fault


if __name__ == "__main__":
    main()
