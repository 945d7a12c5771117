"""The demo: an invented town, its central and its tablet, and a line between them to be cut."""

import contextlib
import os
import signal
import sys
import threading
import webbrowser
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import NoReturn
from urllib.parse import urlsplit

from fieldapp import identity, work
from fieldapp.rehearsal import seen
from fieldapp.rehearsal.folders import folder_for, make_room
from fieldapp.rehearsal.line_page import LinePage
from fieldapp.rehearsal.nodes import Process, Time, make_node
from fieldapp.rehearsal.relay import Relay
from fieldapp.rehearsal.stage import Stage
from fieldapp.rehearsal.town import LABELS, make_town
from fieldapp.running import hand_over

LOOK_S = 1.0
ENDED_ITSELF = 1
Say = Callable[[str], None]


def show(*, keep: Path | None, say: Say) -> int:
    """Make the town, serve it, print the addresses, and end everything on a signal.

    Args:
        keep: A folder that keeps ``central`` and ``tablet``; a demo or a rehearsal that ended
            there goes on where it was.
        say: Told what is being done and where to look, a line each.

    Returns:
        The exit code: 0, or 1 where a node ended by itself.

    Raises:
        Unsuitable, FolderHeld: ``keep`` holds something that no rehearsal made, or that runs.
        NotStarted: A node's process did not come up.
    """
    _end_on_hangup()
    with folder_for(keep, "demo-") as folder:
        code = _show(folder, say)
    say("Ended, and nothing is left." if keep is None else f"Ended. Kept in {folder}.")
    return code


def _show(folder: Path, say: Say) -> int:
    known = _is_whole(folder)
    say("Going on where it was." if known else "Making the town and its round of last year…")
    with contextlib.ExitStack() as opened:
        stage = _go_on(folder, opened) if known else _begin(folder, opened)
        page = opened.enter_context(LinePage(stage))
        ended = _signals()
        say(f"Desk and Bench at central:  {stage.central_url}/")
        say(f"Kitchen on the tablet:      {stage.tablet_url}/")
        say(f"The line between them:      {page.url}/")
        say("Ctrl-C ends all three and leaves nothing running.")
        if _has_a_display():
            webbrowser.open(page.url)
        while not ended.wait(LOOK_S):
            for node in stage.nodes:
                if not node.alive:
                    say(f"The node of {node.folder} ended by itself: {node.said}")
                    return ENDED_ITSELF
    return 0


def _begin(folder: Path, opened: contextlib.ExitStack) -> Stage:
    """Make the town, enrol its tablet over the line and let it fetch its route."""
    make_room(folder)
    town = make_town(folder)
    central, tablet = folder / "central", folder / "tablet"
    make_node(tablet, town.time).close()
    nodes = _start(folder, opened)
    relay = opened.enter_context(Relay(_port(nodes[0].url)))
    invited = hand_over(central, "invite", {"person": town.sampler}, work.quiet)
    hand_over(tablet, "enrol", {"url": relay.url, "code": invited["code"]}, work.quiet)
    hand_over(tablet, "sync", {}, work.quiet)
    return _stage(folder, town.time, relay, nodes)


def _go_on(folder: Path, opened: contextlib.ExitStack) -> Stage:
    """Start the kept nodes; the tablet finds the line where it was, or is told where it is now."""
    central, tablet = folder / "central", folder / "tablet"
    time = Time.of(seen.zone_of(central), [central, tablet])
    node = opened.enter_context(Process("central", central))
    pinned = identity.central_of(tablet) or {}
    relay = opened.enter_context(_line(_port(node.url), _port(pinned["url"])))
    identity.pin_central(tablet, {**pinned, "url": relay.url})
    nodes = (node, opened.enter_context(Process("serve", tablet)))
    return _stage(folder, time, relay, nodes)


def _start(folder: Path, opened: contextlib.ExitStack) -> tuple[Process, Process]:
    central = opened.enter_context(Process("central", folder / "central"))
    tablet = opened.enter_context(Process("serve", folder / "tablet"))
    return central, tablet


def _stage(folder: Path, time: Time, relay: Relay, nodes: tuple[Process, Process]) -> Stage:
    central, tablet = nodes
    return Stage(
        time=time,
        relay=relay,
        nodes=nodes,
        central=central.folder,
        tablet=tablet.folder,
        central_url=central.url,
        tablet_url=tablet.url,
        labels=folder / LABELS,
    )


def _line(central_port: int, wanted: int) -> Relay:
    try:
        return Relay(central_port, port=wanted)
    except OSError:
        return Relay(central_port)


def _is_whole(folder: Path) -> bool:
    """Say whether a demo or a rehearsal lies there that came as far as an enrolled tablet."""
    nodes = (folder / "central", folder / "tablet")
    return (
        all(identity.exists(node) and identity.read(node).scripted for node in nodes)
        and identity.central_of(nodes[1]) is not None
    )


def _port(url: str) -> int:
    return urlsplit(url).port or 0


def _signals() -> threading.Event:
    """Return what is set once a person or the system wants the demo to end."""
    ended = threading.Event()
    for number in _ending():
        signal.signal(number, lambda *_: ended.set())
    return ended


def _end_on_hangup() -> None:
    """Let a closed terminal end the making of the town in order too."""

    def end(_signal: int, _frame: object) -> NoReturn:
        raise SystemExit(ENDED_ITSELF)

    if hasattr(signal, "SIGHUP"):
        signal.signal(signal.SIGHUP, end)


def _ending() -> Iterator[signal.Signals]:
    names = ("SIGINT", "SIGTERM", "SIGHUP")
    return (getattr(signal, name) for name in names if hasattr(signal, name))


def _has_a_display() -> bool:
    """Say whether somebody sits before a screen; never in CI."""
    if not sys.stdout.isatty() or os.environ.get("CI"):
        return False
    if sys.platform in ("win32", "darwin"):
        return True
    return bool(os.environ.get("DISPLAY") or os.environ.get("WAYLAND_DISPLAY"))
