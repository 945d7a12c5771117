"""Corrections of corrections arrive in any order and give the same pages."""

import random
import sqlite3
from pathlib import Path

from fieldapp import projections
from fieldapp.commands import corrections
from fieldapp.domain.facts import EntryCorrected, EntryWithdrawn, PersonListed
from fieldapp.projections import plans
from fieldapp.projections.tables import make_tables
from tests import nodes
from tests.tap import OTHER, SAMPLER, VISIT, Tap

COORDINATOR = "coordinator-1"


def worked(tap: Tap) -> None:
    """Fill two bottles and correct them: one thrice in a chain, one by two devices and further."""
    tap.plan([VISIT, OTHER])
    tap.name_sampler()
    tap.record(PersonListed(person=COORDINATOR, roles=("coordinator",), name="Imaginary"))
    for visit in (VISIT, OTHER):
        tap.begin(visit)
        tap.finish(visit)
        tap.clock.pass_by(minutes=10)
    first = [filled(tap, visit) for visit in (VISIT, OTHER)]
    for fill in ("below", "over", "spilled"):
        correct(tap, filled(tap, VISIT), fill)
    other = {**first[1].fact.data(), "fill": "spilled"}
    correct(tap, first[1], "below")
    tap.record(EntryCorrected(of=first[1].hash, kind_="bottle.filled", data_=other), by=COORDINATOR)
    with tap.pages() as pages:
        mine = next(e for e in pages.corrections(first[1].hash) if e.fact.fill == "below")
    made = correct(tap, mine, "over")
    tap.record(EntryWithdrawn(of=made[0], reason="it was below"))


def filled(tap: Tap, visit: str):
    with tap.pages() as pages:
        return next(e for e in pages.recorded(visit) if e.fact.kind == "bottle.filled")


def correct(tap: Tap, of, fill: str):
    return tap.decide(
        lambda p, r: corrections.correct(
            p, r, of=of.hash, changes={"fill": fill}, reason="looked again", by=SAMPLER
        ),
        by=SAMPLER,
    )


def test_chains_of_corrections_give_the_same_pages_in_any_order(tmp_path: Path):
    tap = Tap(tmp_path / "node")
    worked(tap)
    with tap.store.reader() as db:
        entries = list(tap.store._all_entries(db))
    wanted = nodes.page_tables(tap.store)
    with tap.pages() as pages:
        assert pages.bottle(tap.codes[VISIT])["fill"] == "spilled"
        kinds = [one["kind"] for one in pages.findings(tap.clock.at)]
    tap.store.close()
    assert kinds.count("corrected-twice") == 1

    for seed in range(15):
        shuffled = list(entries)
        random.Random(seed).shuffle(shuffled)
        plans._protocols.clear()
        db = sqlite3.connect(":memory:", isolation_level=None)
        make_tables(db)
        for entry in shuffled:
            projections.follow(db, [entry])
        assert nodes.tables_in(db) == wanted, seed
        db.close()
