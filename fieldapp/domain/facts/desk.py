"""Facts of the Desk: decisions and settlements of the coordinator."""

from fieldapp.domain.facts.base import CENTRAL, ROUTE_LAB, Done, fact, private


@fact("analysis.decided", place="desk", reach=ROUTE_LAB)
class AnalysisDecided(Done):
    """A held bottle is to be analysed or not, decided before any result exists (R8)."""

    bottle: str
    analyse: bool
    reason: str = private()


@fact("finding.settled", place="desk", reach=CENTRAL)
class FindingSettled(Done):
    """A person settled a finding; ``kind`` and ``about`` say which, with a reason."""

    finding: str
    kind_: str
    about: str
    reason: str = private()
