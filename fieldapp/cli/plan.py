"""Commands of a round: import it, print its labels and lid pages, take in results."""

import base64
import json
import sys
from pathlib import Path
from typing import Any, NoReturn

import click

from fieldapp.cli.shared import (
    NO,
    folder_option,
    handed,
    json_option,
    main,
    raw,
    write,
)


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
    asked = {"file": file.name, "data": raw(file), "amend": amend}
    answer = handed(folder, "round-import", asked)
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
    answer = handed(folder, "results-import", {"file": file.name, "data": raw(file)})
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
        answer = handed(folder, "labels", asked)
        target = output if name == route else _beside(output, name, route)
        write(target, base64.b64decode(answer.pop("pdf")))
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
    answer = handed(folder, "custody", {"cooler": cooler, "route": route})
    write(output, base64.b64decode(answer.pop("pdf")))
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
