"""What the Kitchen's pages show: a day's stops, and one visit with its present step."""

from collections.abc import Mapping, Sequence
from datetime import UTC, date, datetime, timedelta
from functools import partial
from typing import Any
from zoneinfo import ZoneInfo

from flask import g, render_template, request, url_for

from fieldapp import words
from fieldapp.commands import drawing, kitchen, last_use
from fieldapp.commands.asked import latest, planned, standing_of
from fieldapp.commands.crate import OPEN
from fieldapp.domain.bottles import in_order
from fieldapp.domain.deviations import bias_of, stated_kinds
from fieldapp.domain.facts import (
    DeviationStated,
    RunEnded,
    RunStarted,
    TapOpened,
    VisitClosed,
    VisitLeft,
    VisitOpened,
    WaterUsed,
)
from fieldapp.domain.protocols.standing import Standing
from fieldapp.domain.recorded import Recorded
from fieldapp.domain.timetext import chips
from fieldapp.projections import crates
from fieldapp.projections.pages import Row
from fieldapp.web import pictures, said, shown, spoken
from fieldapp.web.context import pages, person, reading
from fieldapp.web.rail import rail

MINUTE = timedelta(minutes=1)
BEFORE_RING = timedelta(minutes=5)
"""How long before the earliest draw to stand at the door. Our choice."""

LATELY = (0, 2, 5, 10, 15, 20, 30)
"""Minutes ago at which water may have run again."""

RESTS = ("over", "open")
"""Steps on which no bottle is at hand, so none is drawn large."""


def zone_of(visit: str) -> str:
    """Return the zone of the visit's round, and let every sentence of this request use it."""
    plan = planned(pages(), visit)
    found = pages().round(plan.round)
    g.zone = str(found["zone"]) if found else "UTC"
    return str(g.zone)


def show_visit(visit: str, *, says: str = "", sent: Mapping[str, str] | None = None) -> str:
    """Return the page of the step that is due; with ``says`` above it where a rule was broken."""
    found = gather(visit)
    due = found["due"]
    chosen = due.here or request.args.get("wait")
    waits = due.kind == "wait" and due.until is not None and chosen
    template = "waiting" if waits or _only_waits(found["told"]) else due.kind
    if due.kind == "last-use":
        found |= last_use_choices(found["zone"])
    return render_template(
        f"kitchen/{template}.html", says=says, sent=sent or {}, **found, spoken=spoken
    )


def gather(visit: str) -> dict[str, Any]:
    """Return what every page of one visit needs."""
    zone = zone_of(visit)
    plan = planned(pages(), visit)
    told = standing_of(pages(), visit, reading())
    recorded = in_order(pages().recorded(visit))
    protocol = pages().protocol(plan.sha256)
    due = told.due
    hands = () if due.kind in RESTS else due.draws or (due.next_draw,)
    return {
        "visit": visit,
        "plan": plan,
        "zone": zone,
        "told": told,
        "due": due,
        "draws": {one.draw: one for one in told.draws},
        "protocol": protocol,
        "in_force": protocol is None or protocol.in_force_on(_day(zone, begun(recorded))),
        "site": pages().site(plan.site, plan.round, private=told.state != "closed") or {},
        "rail": rail(told.draws, (due.next_draw,) if due.next_draw else hands),
        "undo": undo(recorded, zone),
        "stand_says": _stand_says(told, recorded),
        "use_says": _use_says(recorded, zone),
        "left_entry": latest(recorded, VisitLeft),
        "expected": _expected(visit, told),
        "ran_short": _ran_short(told, recorded),
        "until_says": _up(due.until) if due.until else ("", ""),
        "left_says": _up(told.earliest_draw) if told.earliest_draw else ("", ""),
        "meanwhile": _meanwhile(plan.route, visit) if due.kind == "wait" else None,
        **_taken(told, recorded),
        "photos": pictures.of_visit(visit, private=told.state != "closed"),
        "back": url_for("kitchen.route", route=plan.route),
    }


def _taken(told: Standing, recorded: Sequence[Recorded]) -> dict[str, Any]:
    """Return what the tables of bottles, and the steps that fill them, say."""
    opened, closed = latest(recorded, TapOpened), latest(recorded, VisitClosed)
    return {
        "opened_at": opened.done_at if opened else None,
        "closed_at": closed.done_at if closed else None,
        "outcome": getattr(closed.fact, "outcome", "") if closed else "",
        "last_signature": told.number >= told.of - 1,
        "fills": drawing.FILLS,
        "fill_word": partial(said.of, said.FILLS),
        "draw_kind": partial(said.of, said.KINDS),
        "deviation_says": spoken.deviation,
        "reasons": _reasons(told, recorded),
    }


def _reasons(told: Standing, recorded: Sequence[Recorded]) -> dict[str, list[str]]:
    """Return what people said of each kind of deviation; of a closed visit nothing (R6)."""
    found: dict[str, list[str]] = {}
    for entry in recorded if told.state != "closed" else ():
        if isinstance(entry.fact, DeviationStated):
            whole = pages().fact(entry.hash, private=True)
            reason = str(getattr(whole.fact, "reason", "")) if whole else ""
            found.setdefault(entry.fact.deviation, []).extend([reason] if reason else [])
    return found


def begun(recorded: Sequence[Recorded]) -> datetime | None:
    """Return when the visit began, None while it has not."""
    opened = latest(recorded, VisitOpened)
    return opened.done_at if opened else None


def undo(recorded: Sequence[Recorded], zone: str) -> dict[str, str]:
    """Return the last press of this person on the visit, for the bar that takes it back."""
    acts = [one for one in recorded if one.fact.place == "kitchen"]
    if not acts or acts[-1].by != person() or not person():
        return {}
    first = next(one for one in acts if one.act == acts[-1].act)
    named = first if first.fact.kind == "tap.closed" else acts[-1]
    return {"of": acts[-1].hash, "says": spoken.press(named, zone)}


def last_use_choices(zone: str) -> dict[str, Any]:
    """Return the chips with which a last use of water is stated (R4)."""
    return {
        "chip_groups": spoken.chip_groups(chips(reading().at, zone)),
        "exact": last_use.EXACT,
        "places": last_use.WHERE,
        "known_by": last_use.KNOWN_BY,
        "about_minutes": int(last_use.ABOUT / MINUTE),
    }


def lately(zone: str) -> list[dict[str, Any]]:
    """Return chips for a use of water a moment ago, to the minute: what a short stand asks for."""
    now = reading().at
    offered = {one.at for one in chips(now, zone)}
    made = []
    for minutes in LATELY:
        at = now - minutes * MINUTE
        if at in offered:
            continue
        says = spoken.ago(minutes)
        made.append({"at": at, "says": says, "local": f"{at.astimezone(ZoneInfo(zone)):%H:%M}"})
    return made


def stops_of(route: str) -> list[dict[str, Any]]:
    """Return the stops of a route in their order, each with where it stands now."""
    return [_stop(row) for row in pages().visits(route=route)]


def crate_of(route: str) -> dict[str, Any]:
    """Return what the board says of the crate: doors to count at, and the act that is due (R17)."""
    coolers = crates.coolers(pages(), route=route)
    loose = crates.loose(pages(), route)
    taking = [one for one in coolers if one["state"] in OPEN and one["bottles"]]
    sealed = [one for one in coolers if one["state"] == "sealed"]
    held = next(iter((*taking, *sealed)), None)
    due = "seal" if taking else "hand-over" if sealed else ""
    return {
        "doors": crates.doors(pages(), route),
        "due": "pack" if loose and not taking else due,
        "box": held["box"] if held else "",
        "bottles": len(loose) + sum(one["packed"] for one in taking) or (held or {}).get("packed"),
    }


def short_count(visit: str, counted: int) -> str:
    """Return what to say where fewer bottles were counted into the crate than were filled."""
    full = crates.carried(pages(), visit)
    if counted >= len(full):
        return ""
    says = words.gettext(
        "Counted into the crate: {counted} of {n}. Look for {codes} before you drive on."
    )
    return says.format(counted=counted, n=len(full), codes=", ".join(map(shown.code, full)))


def next_of(stops: Sequence[Mapping[str, Any]]) -> Mapping[str, Any] | None:
    """Return the stop to go to: one begun, one that rings, one to do, then one that waits."""
    for state in ("open", "ready", "planned", "left"):
        found = [one for one in stops if one["state"] == state and not one["dropped"]]
        if found:
            return (
                min(found, key=lambda one: one["earliest"] or "") if state == "left" else found[0]
            )
    return None


def rings_of(stops: Sequence[Mapping[str, Any]]) -> list[Mapping[str, Any]]:
    """Return the waiting stops, the one whose earliest draw comes first before the others."""
    waiting = [one for one in stops if one["state"] == "left" and one["earliest"]]
    return sorted(waiting, key=lambda one: str(one["earliest"]))


def different_choices(found: Mapping[str, Any]) -> dict[str, Any]:
    """Return what the page "something is different" offers."""
    told: Standing = found["told"]
    return {
        "whys": kitchen.LEAVE_WHYS,
        "kinds": stated_kinds(),
        "bias_of": bias_of,
        "outcomes": kitchen.OUTCOMES[1:],
        "void_whys": drawing.VOID_WHYS,
        "empty": [one for one in told.draws if one.state in ("waiting", "set")],
        "unfilled": [one for one in told.draws if one.filled_at is None],
    }


def _stop(row: Row) -> dict[str, Any]:
    now = reading().at
    earliest = row["earliest_draw"]
    state = row["state"]
    # a visit in which the water stands waits, whether or not anybody pressed that they left
    waits = state == "left" or (state == "open" and row["due"] == "wait" and earliest)
    if waits:
        ready = bool(earliest) and datetime.fromisoformat(earliest) <= now
        state = "ready" if ready else "left"
    protocol = pages().protocol(row["sha256"])
    plan = pages().plan(row["visit"])
    left = latest(pages().recorded(row["visit"]), VisitLeft) if row["state"] == "left" else None
    return {
        **row,
        "state": state,
        "earliest": earliest if row["state"] in ("left", "open") else "",
        "title": protocol.title if protocol else row["protocol"],
        "bottles": len(plan.draws) if plan else 0,
        "left_why": getattr(left.fact, "why", "") if left else "",
        "left_says": _up(datetime.fromisoformat(earliest)) if earliest else ("", ""),
    }


def _meanwhile(route: str, visit: str) -> Mapping[str, Any] | None:
    """Return the stop to go on with while the water stands here."""
    others = [one for one in stops_of(route) if one["visit"] != visit]
    return next_of([one for one in others if one["state"] != "left"])


def _only_waits(told: Standing) -> bool:
    """Say whether a wait is due that no rule bars an act for: the sampler chose it, or a step."""
    return told.due.kind == "wait" and all(one.breach == "ask" for one in told.bars) and (
        not told.bars or told.bars[0].rule == "stand-in-doubt"
    )  # fmt: skip


def _stand_says(told: Standing, recorded: Sequence[Recorded]) -> str:
    used = latest(recorded, WaterUsed)
    return spoken.stand(told, getattr(used.fact, "told_by", "") if used else "")


def _use_says(recorded: Sequence[Recorded], zone: str) -> str:
    used = latest(recorded, WaterUsed)
    return spoken.last_use(used, zone, reading().at) if used else ""


def _ran_short(told: Standing, recorded: Sequence[Recorded]) -> timedelta | None:
    """Return how long the last run to waste took, where it has to run once more."""
    started, ended = (latest(recorded, kind, step=told.due.step) for kind in (RunStarted, RunEnded))
    if told.due.kind != "run" or told.due.since or not (started and ended):
        return None
    return ended.done_at - started.done_at


def _expected(visit: str, told: Standing) -> list[str]:
    """Return the codes printed for the draw whose bottle is due."""
    return [
        str(row["bottle"])
        for row in pages().bottles(visit=visit)
        if row["printed_for"] == visit
        and row["draw"] == told.due.next_draw
        and not row["voided"]
        and not row["filled"]
    ]


def _up(until: datetime) -> tuple[str, str]:
    """Return the time left, a begun minute as a whole one: the figure, and its unit if any."""
    left = spoken.short_of(until, reading().at)
    hours, minutes = divmod(-(-left // MINUTE), 60)
    return (f"{hours} h {minutes:02d}", "") if hours else (str(minutes), "min")


def _day(zone: str, at: datetime | None = None) -> date:
    return (at or reading().at).astimezone(ZoneInfo(zone)).date()


def today(zone: str) -> str:
    """Return the local day in the zone as ISO text."""
    return str(_day(zone))


def ring_before(earliest: str) -> datetime:
    """Return when to stand at the door for a draw that may begin at ``earliest``."""
    return datetime.fromisoformat(earliest).astimezone(UTC) - BEFORE_RING
