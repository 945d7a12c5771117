"""Import a laboratory's results file: every row or none."""

import base64
from collections.abc import Callable
from typing import Any

from fieldapp.commands import results
from fieldapp.domain.decision import Decision
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.recorded import Reading
from fieldapp.identity import new_act
from fieldapp.projections.pages import Pages
from fieldapp.reading.results import ResultsFile, read_results
from fieldapp.store import Store


def import_results(
    store: Store, *, file: str, data: str, progress: Callable[..., None]
) -> dict[str, Any]:
    """Import a results file.

    Args:
        file: Its name, for the reader.
        data: Its bytes as base64.

    Returns:
        ``rows`` in the file, ``facts`` appended (0 when all was known), ``bottles``, ``notes``.
    """
    raw = base64.b64decode(data)
    with store.pages() as pages:
        found = read_results(raw, file, resolve=_resolver(pages))
    progress("read", 1, 2)
    answer = store.act(
        new_act(),
        {"results": found.sha256},
        lambda pages, reading: _decide(pages, reading, found),
        by="",
    )
    progress("recorded", 2, 2)
    return {**answer.answer, "notes": [note.line for note in found.notes]}


def _decide(pages: Pages, reading: Reading, found: ResultsFile) -> Decision:
    rounds = {
        str(row["round"])
        for given in found.rows
        if (row := pages.bottle(given.bottle)) is not None and row["round"]
    }
    facts = results.import_results(
        pages,
        reading,
        found.rows,
        file_sha=found.sha256,
        round_id=rounds.pop() if len(rounds) == 1 else "",
    )
    bottles = sorted({given.bottle for given in found.rows})
    return Decision(facts, {"rows": len(found.rows), "facts": len(facts), "bottles": len(bottles)})


def _resolver(pages: Pages) -> Callable[[str, str], str | None]:
    def resolve(code: str, number: str) -> str | None:
        """Return the bottle that a code or a laboratory's number means, if this node knows it."""
        if code:
            return code if pages.bottle(code) is not None else None
        found = pages.by_number(number)
        return found[0] if len(found) == 1 else None

    return resolve


__all__ = ["RuleBroken", "import_results"]
