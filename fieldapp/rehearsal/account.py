"""What a rehearsal found at central and on the tablets, as JSON and in words."""

import contextlib
import sqlite3
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from datetime import datetime
from decimal import Decimal
from pathlib import Path
from typing import Any

from fieldapp import identity, photos
from fieldapp.projections import answers, rounds
from fieldapp.projections.pages import Pages
from fieldapp.store import REALM
from fieldapp.web import said
from sync.ledger import prepare
from sync.verify import verify_folder

COUNTED = ("issued", "filled", "received", "refused", "to_analyse", "resulted")


@dataclass(frozen=True)
class Account:
    """Counts are bottles at central; ``good`` is what the exit code says.

    ``stopped`` says that a page or a node failed the walker: what was counted is only a part.
    """

    visits: int
    bottles: dict[str, int]
    entries: int
    photos: int
    findings: list[dict[str, str]]
    ninetieth: dict[str, dict[str, Any]]
    chain: str
    lines: list[str] = field(default_factory=list)
    stopped: bool = False

    @property
    def good(self) -> bool:
        """Every issued bottle filled and received, every result in, chains hold, no finding."""
        told = self.bottles
        return (
            told["issued"] == told["filled"] == told["received"]
            and told["to_analyse"] == told["resulted"]
            and self.chain == "intact"
            and not self.findings
            and not self.stopped
        )

    def as_json(self) -> dict[str, Any]:
        """Return what ``--json`` prints."""
        return {
            "visits": self.visits, "bottles": self.bottles, "entries": self.entries,
            "photos": self.photos, "findings": self.findings, "ninetieth": self.ninetieth,
            "chain": self.chain,
        }  # fmt: skip

    def in_words(self) -> str:
        """Return what a person reads."""
        told = self.bottles
        figures = [
            f"{analyte}: 90th percentile {one['value'] or 'none'} {one['unit']}, n {one['n']}, "
            f"{one['convention']}"
            for analyte, one in self.ninetieth.items()
        ]
        return "\n".join([
            f"{self.visits} visits; bottles: "
            + ", ".join(f"{told[name]} {name.replace('_', ' ')}" for name in COUNTED),
            *figures,
            f"{self.entries} entries and {self.photos} photos at central, "
            f"chain {self.chain} at every node.",
            *(f"Finding: {one['says']}" for one in self.findings),
            "Every bottle went the whole way and nothing is open." if self.good
            else "Something is open: see above.",
        ])  # fmt: skip


def account_of(
    central: Path,
    tablets: Iterable[Path],
    round_id: str,
    lines: list[str],
    *,
    stopped: bool = False,
) -> Account:
    """Read the closed folders and return the account of that round."""
    chain = "intact"
    for folder in (central, *tablets):
        report = verify_folder(folder, REALM)
        if report.first_fault is not None:
            chain = "broken"
            lines.append(f"{folder.name}: {report.first_fault.says}")
    now = identity.clock_of(central).read().at
    with _reading(central) as pages:
        row = pages.round(round_id)
        assert row is not None
        totals = rounds.totals(pages, round_id)
        return Account(
            visits=pages.count(
                "SELECT COUNT(*) FROM p_visit WHERE round = ? AND state = 'closed'", (round_id,)
            ),
            bottles={name: totals[name] for name in COUNTED},
            entries=pages.count("SELECT COUNT(*) FROM entry"),
            photos=_photos(pages, central),
            findings=[
                {
                    "kind": one["kind"],
                    "about": one["about"],
                    "says": said.finding(one, row["zone"], now),
                }
                for one in pages.findings(now)
            ],
            ninetieth=_figures(pages, row, now),
            chain=chain,
            lines=lines,
            stopped=stopped,
        )


@contextlib.contextmanager
def _reading(folder: Path) -> Iterator[Pages]:
    """Lend the page tables as they lie: a record that is broken is counted all the same."""
    database = folder / identity.DATABASE
    wal = database.with_name(database.name + "-wal")
    how = "mode=ro" if wal.exists() and wal.stat().st_size else "mode=ro&immutable=1"
    uri = f"{database.resolve().as_uri()}?{how}"
    with contextlib.closing(sqlite3.connect(uri, uri=True)) as db:
        prepare(db, reader=True)
        yield Pages(db)


def _photos(pages: Pages, central: Path) -> int:
    """Return how many photos central holds: noted there, and the picture itself on its disk."""
    noted = {
        str(row["photo"])
        for row in pages.rows(
            "SELECT json_extract(data, '$.photo') AS photo FROM p_fact WHERE kind = 'photo.taken'"
        )
    }
    return sum(1 for name in noted if photos.find(name, central) is not None)


def _plain(level: Decimal) -> str:
    """Return a level without zeros that say nothing: ``556``, never ``5.56E+2``."""
    return format(level.normalize(), "f")


def _figures(pages: Pages, row: Any, now: datetime) -> dict[str, dict[str, Any]]:
    found = {}
    for figure in answers.figures(pages, row, now):
        answer = figure.answer
        value = None if answer.value is None else _plain(answer.value)
        found[answer.analyte] = {
            "value": value, "unit": "ug/L", "n": answer.n, "convention": answer.convention,
        }  # fmt: skip
    return found
