"""What a command says when work cannot be done: sentences, and whether the answer is *no*."""

import sqlite3
from typing import Any

from fieldapp import words
from fieldapp.domain.errors import RuleBroken
from fieldapp.printing.sheets import CannotPrint
from fieldapp.reading.faults import BadFile
from sync.errors import SyncError


def said_of(fault: Exception) -> dict[str, Any]:
    """Return the lines a person reads and whether this is a fault of the program.

    A known refusal is exit 1 with its sentences; anything else is told with its type.
    """
    if isinstance(fault, BadFile):
        return {"lines": [one.line for one in fault.faults], "known": True}
    if isinstance(fault, RuleBroken):
        lines = [words.broken(fault.kind, fault.values)]
        lines += [str(line) for line in fault.values.get("changes", ())]
        return {"lines": lines, "known": True}
    if isinstance(fault, SyncError | CannotPrint):
        return {"lines": [str(fault)], "known": True}
    if isinstance(fault, sqlite3.OperationalError) and "full" in str(fault):
        says = "The disk is full. Nothing of this was saved. Free some space and run it again."
        return {"lines": [words.gettext(says)], "known": True}
    return {"lines": [f"{type(fault).__name__}: {fault}"], "known": False}
