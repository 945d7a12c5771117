"""Rehearse the shipped round, then serve its central and its tablet until Ctrl-C."""

import signal
import tempfile
import threading
from collections.abc import Callable
from pathlib import Path

from fieldapp.rehearsal.nodes import Process
from fieldapp.rehearsal.walk import rehearse


def show(*, keep: Path | None, say: Callable[[str], None]) -> int:
    """Rehearse, serve both nodes, print their addresses, and end both on a signal.

    Returns:
        The exit code: 0, or 1 where the rehearsal found something open.
    """
    with tempfile.TemporaryDirectory(prefix="demo-") as throwaway:
        folder = keep or Path(throwaway)
        account = rehearse(None, keep=folder, say=say)
        say(account.in_words())
        ended = threading.Event()
        for name in (signal.SIGINT, signal.SIGTERM):
            signal.signal(name, lambda *_: ended.set())
        with (
            Process("central", folder / "central") as central,
            Process("serve", folder / "tablet") as tablet,
        ):
            say("")
            say(f"Desk and Bench at central:  {central.url}/")
            say(f"Kitchen on the tablet:      {tablet.url}/")
            say("The day of these pages is the rehearsal's. Ctrl-C ends both and leaves nothing.")
            ended.wait()
        say("Ended." if keep is None else f"Ended. Kept in {folder}.")
        return 0 if account.good else 1
