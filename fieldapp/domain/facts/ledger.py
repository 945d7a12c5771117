"""Facts about the record itself: logs, corrections, clocks."""

from collections.abc import Mapping
from dataclasses import field
from typing import Any

from fieldapp.domain.facts.base import ALL, CENTRAL, ROUTE_LAB, Done, Fact, fact, private


@fact("log.opened", place="ledger", reach=ALL)
class LogOpened(Fact):
    """The first entry of every log: whose key signs it and which log came before."""

    public_key: str
    why: str
    clock: str = ""
    prev_log: str = ""
    prev_head: str = ""


@fact("log.carried", place="ledger", reach=CENTRAL)
class LogCarried(Fact):
    """An entry of a branch that central does not hold, carried whole into the new log.

    ``orig`` is its text, or ``deflated`` where that is long; ``priv`` labels its private part
    and ``scope`` repeats its words: sync pulls it like the entry inside, so it has no reach of
    its own.
    """

    sig: str
    orig: str = ""
    deflated: str = ""
    scope: tuple[str, ...] = ()
    priv: Mapping[str, Any] | None = None


@fact("clock.checked", place="ledger", reach=CENTRAL)
class ClockChecked(Fact):
    """One comparison of this device's clock with central's, at a session.

    ``offset_ms`` is this clock less central's, give or take half of ``rtt_ms``; both are absent
    where the device could not tell.
    """

    central_at: str
    rtt_ms: int | None = None
    offset_ms: int | None = None


@fact("entry.corrected", place="ledger", reach=ROUTE_LAB)
class EntryCorrected(Done):
    """New data for an earlier entry; the old one stays and is shown struck through.

    ``data`` is the whole new data and brings the time along at which the thing was done;
    ``hidden`` the whole private part, where whoever corrected held it.
    """

    of: str
    kind_: str
    data_: Mapping[str, Any]
    reason: str = private()
    hidden: Mapping[str, Any] | None = field(default=None, metadata={"private": True})


@fact("entry.withdrawn", place="ledger", reach=ROUTE_LAB)
class EntryWithdrawn(Done):
    """An earlier entry is taken back, with a reason; it stays readable."""

    of: str
    reason: str = private()
