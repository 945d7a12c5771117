"""What every command shares: options, sentences for refusals, handing work to a node."""

import base64
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


def run_node_of(store: Any, **options: Any) -> None:
    from fieldapp.running import serve as run_node

    def ready(running: Any) -> None:
        click.echo(f"{running.url}/")
        sys.stdout.flush()

    end_in_order(0)
    run_node(store, ready=ready, **options)


def end_in_order(code: int = NO) -> None:
    """Let SIGTERM end the command as Ctrl-C does: what it opened is closed, its nodes end."""

    def end(_signal: int, _frame: Any) -> NoReturn:
        raise SystemExit(code)

    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGTERM, end)


def handed(folder: Path, name: str, asked: dict[str, Any]) -> dict[str, Any]:
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


def raw(file: Path) -> str:
    return base64.b64encode(file.read_bytes()).decode()


def write(path: Path, data: bytes) -> None:
    half = path.with_name(path.name + ".part")
    try:
        half.write_bytes(data)
        half.replace(path)
    except OSError as fault:
        half.unlink(missing_ok=True)
        raise click.ClickException(f"{path} cannot be written: {fault.strerror}.") from fault
