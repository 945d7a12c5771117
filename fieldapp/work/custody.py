"""Print a cooler's custody record: what its lid holds for a laboratory that installs nothing."""

import base64
import io
from collections.abc import Callable, Mapping
from datetime import date, datetime, timedelta
from typing import Any
from zoneinfo import ZoneInfo

from fieldapp.domain.bottles import in_order
from fieldapp.domain.errors import RuleBroken, Unknown
from fieldapp.domain.facts import BottleFilled
from fieldapp.printing.custody import CustodyRecord, Line, custody_pdf
from fieldapp.projections import crates
from fieldapp.projections.pages import Pages, Row
from fieldapp.projections.rounds import deviations_on
from fieldapp.store import Store
from fieldapp.words import DEVIATIONS, N_, say, word
from fieldapp.words import gettext as _
from fieldapp.words.days import WEEKDAYS
from fieldapp.work.labels import draw_words

TO = {
    "laboratory": N_("to the laboratory"),
    "courier": N_("to a courier"),
    "night-box": N_("into the night box"),
    "colleague": N_("to a colleague"),
}
STOOD = {
    "measured": N_("measured"),
    "clocked": N_("clocked"),
    "stated": N_("stated"),
    "metered": N_("metered"),
}

BIAS = {"low": N_("low"), "high": N_("high"), "either": N_("low or high")}


class SeveralCoolers(RuleBroken):
    """``count`` coolers bear the number ``box``, and nobody said which."""

    kind = "several-coolers"


def print_custody(
    store: Store, *, cooler: str, route: str = "", progress: Callable[..., None]
) -> dict[str, Any]:
    """Draw the custody record of a cooler.

    Args:
        store: The node.
        cooler: Its id, or the number of its box.
        route: The route that carries the box, empty where one such box is on the way.
        progress: Told what is done; a page takes no time.

    Returns:
        ``cooler``, ``bottles`` in it, ``pdf`` as base64.

    Raises:
        Unknown: No such cooler is here.
        SeveralCoolers: A box of that number is on more than one route.
        CannotPrint: Nothing is in it.
    """
    with store.pages() as pages:
        row = find_cooler(pages, cooler, route)
        record = record_of(pages, row)
    out = io.BytesIO()
    custody_pdf(record, out)
    progress("custody", 1, 1)
    pdf = base64.b64encode(out.getvalue()).decode()
    return {"cooler": row["cooler"], "bottles": len(record.lines), "pdf": pdf}


def find_cooler(pages: Pages, name: str, route: str = "") -> Row:
    """Return the cooler of that id, or the latest load of that box on the route."""
    wanted = name.strip()
    if (row := crates.cooler(pages, wanted.upper())) is not None:
        return row
    found = [one for one in crates.coolers(pages, route=route) if one["box"] == wanted]
    on_the_way = [one for one in found if one["state"] != "received"] or found
    if not on_the_way:
        raise Unknown(what="cooler", name=name)
    if len({one["route"] for one in on_the_way}) > 1:
        raise SeveralCoolers(box=wanted, count=len(on_the_way))
    return on_the_way[-1]


def record_of(pages: Pages, row: Row) -> CustodyRecord:
    """Return what the page says; of people only the sampler's name, of a site only its code."""
    route = pages.route(row["route"]) or {}
    round_row = pages.round(row["round"]) or {}
    zone = str(round_row.get("zone") or "UTC")
    sampler = pages.person(str(route.get("sampler", ""))) or {}
    rows = [(code, pages.bottle(code)) for code in row["bottles"]]
    rows.sort(key=lambda one: (str((one[1] or {}).get("filled_at", "")), one[0]))
    return CustodyRecord(
        title=_title(row),
        cooler=row["cooler"],
        round=" · ".join(
            filter(None, (round_row.get("title"), _("times of {zone}").format(zone=zone)))
        ),
        route=str(route.get("title") or row["route"]),
        laboratory=str(round_row.get("laboratory_title") or round_row.get("laboratory") or ""),
        sampler=str(sampler.get("name") or sampler.get("person") or ""),
        seals=tuple(row["seals"]),
        broken=tuple(row["broken"]),
        handed=_handed(row, zone),
        lines=tuple(_line(pages, code, bottle, zone) for code, bottle in rows),
        set_hash=row["set_hash"],
    )


def _title(row: Row) -> str:
    name = _("Cooler {box}").format(box=row["box"] or row["cooler"])
    if not row["day"]:
        return name
    day = date.fromisoformat(row["day"])
    return f"{name}, {_(WEEKDAYS[day.weekday()])} {day.isoformat()}"


def _handed(row: Row, zone: str) -> str:
    if not row["relinquished_at"]:
        return ""
    said = [_(TO.get(row["handed_to"], row["handed_to"])), _local(row["relinquished_at"], zone)]
    if row["waybill"]:
        said.append(_("waybill {number}").format(number=row["waybill"]))
    return ", ".join(said)


def _line(pages: Pages, code: str, row: Row | None, zone: str) -> Line:
    if row is None:
        return Line(code=code, deviations=_("no record of this bottle is on this device"))
    visit = pages.visit(row["visit"])
    collected, struck = _collected(pages, code, zone)
    return Line(
        code=code,
        site=str(row["site"]),
        tap=str(visit["tap"]) if visit else "",
        draw=draw_words(int(row["draw"]), str(row["kind"])),
        volume=f"{row['volume_ml']} mL" if row["volume_ml"] else "",
        analyses=", ".join(word(one) for one in row["analyse"]) or _("not analysed"),
        preservative=_("acid") if row["preservative"] == "acid" else _("no acid"),
        collected=collected,
        struck=struck,
        stood=_stood(visit) if row["kind"] != "blank" else "",
        deviations="; ".join(_deviation(one) for one in deviations_on(visit, row)),
    )


def _collected(pages: Pages, code: str, zone: str) -> tuple[str, tuple[str, ...]]:
    """Return when it was filled, and the times that a correction struck through."""
    entries = [
        e for e in in_order(pages.story(f"bottle:{code}")) if isinstance(e.fact, BottleFilled)
    ]
    gone = pages.gone(entry.hash for entry in entries)
    living = [_local(e.done_at, zone) for e in entries if e.hash not in gone]
    struck = [
        _local(e.done_at, zone)
        for e in entries
        if e.hash in gone and gone[e.hash]["how"] == "corrected"
    ]
    now = living[-1] if living else ""
    return now, tuple(dict.fromkeys(one for one in struck if one != now))


def _stood(visit: Mapping[str, Any] | None) -> str:
    if visit is None or visit["stand_shortest_s"] is None:
        return ""
    length = _hours(int(visit["stand_shortest_s"]))
    basis = STOOD.get(str(visit["stand_basis"]), "")
    return f"{length}, {_(basis)}" if basis else length


def _hours(seconds: int) -> str:
    minutes = int(timedelta(seconds=seconds) / timedelta(minutes=1))
    return f"{minutes // 60} h {minutes % 60:02d}" if minutes >= 60 else f"{minutes} min"


def _deviation(found: Mapping[str, Any]) -> str:
    kind = str(found["kind"])
    says = say(DEVIATIONS, kind, found.get("values") or {}) if kind in DEVIATIONS else kind
    return f"{says} ({_(BIAS.get(str(found['bias']), str(found['bias'])))})"


def _local(at: str | datetime, zone: str) -> str:
    moment = datetime.fromisoformat(at) if isinstance(at, str) else at
    return moment.astimezone(ZoneInfo(zone)).strftime("%Y-%m-%d %H:%M")
