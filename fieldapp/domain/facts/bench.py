"""Facts of the Bench: what the laboratory received and reported."""

from collections.abc import Mapping

from fieldapp.domain.facts.base import CENTRAL, ROUTE_LAB, Done, Fact, fact, private


@fact("bottle.received", place="bench", reach=ROUTE_LAB)
class BottleReceived(Done):
    """The laboratory's act on one bottle: ``accepted``, ``held`` or ``refused``.

    ``checks`` maps a check of the receipt list to its answer, only where it is not as it should be.
    """

    bottle: str
    outcome: str
    cooler: str = ""
    laboratory: str = ""
    laboratory_number: str = ""
    checks: Mapping[str, str] | None = None
    reason: str = private()


@fact("results.learned", place="bench", reach=CENTRAL)
class ResultsLearned(Fact):
    """Results came to hand; ``way`` is ``file``, ``call`` or ``mail``, ``file`` its SHA-256."""

    way: str
    learned_at: str
    file: str = ""
    round: str = ""


@fact("result.reported", place="bench", reach=CENTRAL)
class ResultReported(Fact):
    """One analyte's level in one bottle, as the laboratory's file says it.

    ``value`` is a decimal text in ``unit`` (``ug/L``, ``mg/L``), empty for a bare non-detect;
    ``qualifier`` is empty, ``<`` or ``ND``; ``detection`` and ``reporting`` in the same unit.
    """

    bottle: str
    analyte: str
    value: str
    unit: str
    qualifier: str = ""
    detection: str = ""
    reporting: str = ""
    method: str = ""
    analysed_at: str = ""
    laboratory_number: str = ""
    provisional: bool = False
    file: str = ""
    row: int = 0
