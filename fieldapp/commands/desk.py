"""What the coordinator may do at the Desk: decide on held bottles, settle findings, void codes."""

from fieldapp.commands.bench import ReasonMissing
from fieldapp.commands.told import deviations_of
from fieldapp.domain.codes import grouped, normalise
from fieldapp.domain.errors import RuleBroken, StepOver, Unknown
from fieldapp.domain.facts import AnalysisDecided, BottleVoided, Fact, FindingSettled
from fieldapp.domain.recorded import Reading
from fieldapp.domain.timetext import format_utc as text
from fieldapp.projections.pages import Pages, Row

VOID_WHYS = ("broken", "lost", "misprinted", "replaced", "other")


class ResultStands(RuleBroken):
    """A result exists; analysis can no longer be decided (R8, R9)."""

    kind = "result-stands"


class NotHeld(RuleBroken):
    """The bottle is not held, so nobody waits for a decision on it."""

    kind = "not-held"


class NotYetAFinding(RuleBroken):
    """An absence that cannot be known before ``until`` is not there to be settled (R7)."""

    kind = "not-yet-a-finding"


class BottleInUse(RuleBroken):
    """The code holds water; it can be refused or held, not voided."""

    kind = "bottle-in-use"


def decide_analysis(
    pages: Pages, reading: Reading, *, bottle: str, analyse: bool, reason: str
) -> list[Fact]:
    """Say whether a held bottle is analysed, before any result of it exists (R8).

    Raises:
        ReasonMissing: No reason is given.
        ResultStands: A result is in; deciding now would be choosing by the number.
        NotHeld: The bottle is not held at the Bench, and no deviation came in after its receipt.
        StepOver: The same decision stands.
    """
    row = _bottle(pages, bottle)
    if row["results"]:
        raise ResultStands(bottle=grouped(row["bottle"]))
    if not _waits(pages, row):
        raise NotHeld(bottle=grouped(row["bottle"]))
    if not reason.strip():
        raise ReasonMissing(bottle=row["bottle"])
    if row["decided"] == ("analyse" if analyse else "leave"):
        raise StepOver(at=_latest(pages, f"bottle:{row['bottle']}", "analysis.decided"))
    return [AnalysisDecided(bottle=row["bottle"], analyse=analyse, reason=reason.strip())]


def _waits(pages: Pages, row: Row) -> bool:
    """Say whether a bottle waits for the Desk: held, or in before its record told a deviation."""
    late = row["outcome"] == "accepted" and bool(deviations_of(pages, row))
    return row["outcome"] == "held" or late


def settle_finding(pages: Pages, reading: Reading, *, finding: str, reason: str) -> list[Fact]:
    """Settle a finding with a reason; it stays listed and moves no result in or out (R9).

    Raises:
        Unknown: No finding has that id now; new evidence made another one.
        NotYetAFinding: The absence cannot be known yet (R7).
        ReasonMissing: No reason is given.
        StepOver: It was settled before.
    """
    row = pages.row("SELECT * FROM p_finding WHERE finding = ?", (finding,))
    if row is None:
        raise Unknown(what="finding", name=finding)
    if row["opens_at"] > text(reading.at):
        raise NotYetAFinding(until=row["opens_at"])
    if row["settled"]:
        raise StepOver(at=_latest(pages, f"finding:{finding}", "finding.settled"))
    if not reason.strip():
        raise ReasonMissing(finding=finding)
    return [
        FindingSettled(
            finding=finding, kind_=row["kind"], about=row["about"], reason=reason.strip()
        )
    ]


def void_bottle(pages: Pages, reading: Reading, *, bottle: str, why: str) -> list[Fact]:
    """Say that a code will hold no water: broken, lost, misprinted, replaced.

    Raises:
        Unknown: The code is not known here, or the reason is none of ``VOID_WHYS``.
        BottleInUse: It was filled or received.
        StepOver: It is void already.
    """
    row = _bottle(pages, bottle)
    if why not in VOID_WHYS:
        raise Unknown(what="reason", name=why)
    if row["voided"]:
        raise StepOver(at=_latest(pages, f"bottle:{row['bottle']}", "bottle.voided"))
    if row["filled"] or row["received_at"]:
        raise BottleInUse(bottle=grouped(row["bottle"]))
    return [BottleVoided(bottle=row["bottle"], why=why)]


def _bottle(pages: Pages, bottle: str) -> Row:
    code = normalise(bottle)
    row = pages.bottle(code)
    if row is None:
        raise Unknown(what="bottle", name=code)
    return row


def _latest(pages: Pages, subject: str, kind: str) -> str:
    """Return when the latest entry of that kind was recorded, as UTC text."""
    found = [entry for entry in pages.story(subject) if entry.fact.kind == kind]
    return text(found[-1].at) if found else ""
