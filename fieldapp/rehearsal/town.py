"""The invented town of the demo: a finished round of the year before, and today's route."""

import base64
import json
import shutil
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from fieldapp import work
from fieldapp.domain.timetext import zone_named
from fieldapp.nodes import become_central
from fieldapp.places import shipped
from fieldapp.reading.rounds import RoundFile, read_round
from fieldapp.rehearsal.before import walk_before
from fieldapp.rehearsal.day import at_local
from fieldapp.rehearsal.days import Plan, as_file, on_day
from fieldapp.rehearsal.nodes import Time, make_node
from fieldapp.rehearsal.script import read_script
from fieldapp.rehearsal.way import Way
from fieldapp.store import Store

TODAY, BEFORE = "demo-town.json", "demo-town-before.json"
A_YEAR = timedelta(days=364)
"""Fifty-two weeks: the day of the week stays."""
BEGINS = "05:30"
PLANNED_BEFORE = timedelta(minutes=20)
SPARES = 2
LABELS = "labels.pdf"


@dataclass(frozen=True, slots=True)
class Town:
    """The town as it stands at 05:30: its time, and who goes out today."""

    time: Time
    sampler: str


def make_town(folder: Path, now: datetime | None = None) -> Town:
    """Make ``folder/central`` and print ``folder/labels.pdf`` for today's route.

    ``now`` is an aware moment of the day that is to be today; by default this one.
    """
    file = _shipped(TODAY)
    zone = str(file["round"]["zone"])
    today = (now or datetime.now(UTC)).astimezone(zone_named(zone)).date()
    former, present = on_day(_shipped(BEFORE), today - A_YEAR), on_day(file, today)
    time = Time(zone)
    time.begin(at_local(today - A_YEAR, BEGINS, zone) - PLANNED_BEFORE)
    begins = at_local(today, BEGINS, zone)
    with make_node(folder / "central", time) as central:
        become_central(central)
        _year_before(central, folder / "tablet-before", former, time)
        time.until(begins - PLANNED_BEFORE)
        planned, labels = _plan(central, TODAY, present, spare=SPARES)
        (folder / LABELS).write_bytes(labels)
    time.until(begins)
    return Town(time, planned.routes[0].sampler)


def _year_before(central: Store, tablet: Path, plan: Plan, time: Time) -> None:
    planned, _ = _plan(central, BEFORE, plan)
    with central.pages() as pages:
        rows = pages.bottles(round_id=planned.round.round)
    codes = {(str(row["visit"]), int(row["draw"])): str(row["bottle"]) for row in rows}
    script = read_script(as_file(plan), BEFORE, planned)
    walk_before(central, tablet, Way(planned, script, time, codes))
    time.leave(tablet)
    shutil.rmtree(tablet)


def _plan(central: Store, name: str, plan: Plan, *, spare: int = 0) -> tuple[RoundFile, bytes]:
    """Import a round and print the labels of its one route; return them as PDF."""
    raw = as_file(plan)
    planned = read_round(raw, name)
    asked = {"file": name, "data": base64.b64encode(raw).decode()}
    work.do(central, "round-import", asked, work.quiet)
    labels = {"route": planned.routes[0].route, "spare": spare}
    return planned, base64.b64decode(work.do(central, "labels", labels, work.quiet)["pdf"])


def _shipped(name: str) -> dict[str, Any]:
    plan: dict[str, Any] = json.loads((shipped("demo_routes") / name).read_text("utf-8"))
    return plan
