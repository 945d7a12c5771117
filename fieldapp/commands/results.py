"""What people may do with a file of results: report each row once, whatever stands already."""

from collections.abc import Iterable
from typing import Protocol

from fieldapp.domain.facts import Fact, ResultReported, ResultsLearned
from fieldapp.domain.recorded import Reading
from fieldapp.domain.timetext import format_utc
from fieldapp.projections.pages import Pages


class ReadRow(Protocol):
    """One row of a results file that was read without a fault (``reading.results.ResultRow``)."""

    def reported(self, file: str) -> ResultReported:
        """Return the fact of this row; ``file`` is the SHA-256 of the file as it came."""


def import_results(
    pages: Pages,
    reading: Reading,
    rows: Iterable[ReadRow],
    *,
    file_sha: str,
    round_id: str = "",
    way: str = "file",
) -> list[Fact]:
    """Return the facts of a results file: that it came to hand, and each row not reported yet.

    The same file again gives nothing. A changed value is reported beside the former one, and a
    result for a bottle that was never received is kept: both become findings.
    """
    said: dict[str, set[tuple[str, ...]]] = {}
    new: list[Fact] = []
    for row in rows:
        given = row.reported(file_sha)
        if given.bottle not in said:
            said[given.bottle] = _said_before(pages, given.bottle)
        if _says(given) not in said[given.bottle]:
            said[given.bottle].add(_says(given))
            new.append(given)
    if not new:
        return []
    learned_at = format_utc(reading.at)
    return [ResultsLearned(way=way, learned_at=learned_at, file=file_sha, round=round_id), *new]


def _said_before(pages: Pages, bottle: str) -> set[tuple[str, ...]]:
    entries = pages.story(f"bottle:{bottle}")
    gone = pages.gone(entry.hash for entry in entries)
    return {
        _says(entry.fact)
        for entry in entries
        if entry.hash not in gone and isinstance(entry.fact, ResultReported)
    }


def _says(given: ResultReported) -> tuple[str, ...]:
    """Return what a row says, whichever file and row it stands in."""
    return (
        given.analyte, given.value, given.unit, given.qualifier, given.detection,
        given.reporting, given.method, given.analysed_at, str(given.provisional),
    )  # fmt: skip
