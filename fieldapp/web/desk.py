"""The Desk: rounds with what is open first, their bottles, findings and the figure."""

from collections.abc import Mapping, Sequence
from typing import Any

from flask import Blueprint, abort, flash, g, redirect, render_template, request, url_for
from marshmallow import Schema, fields, validate
from werkzeug.wrappers import Response

from fieldapp import words
from fieldapp.commands import desk
from fieldapp.domain import rules
from fieldapp.domain.codes import BadCode, normalise
from fieldapp.domain.errors import Unknown
from fieldapp.domain.timetext import format_utc as text
from fieldapp.projections import answers, rounds
from fieldapp.projections.pages import Row
from fieldapp.web import said, state
from fieldapp.web.context import load, pages, perform, reading

bp = Blueprint("desk", __name__, url_prefix="/desk")

SORTS = (
    "site", "tap", "protocol", "issued", "filled", "received", "to_analyse", "resulted",
    "stand", "deviations", "findings",
)  # fmt: skip
"""Columns by which the table of a round sorts; with ``-`` before it downward."""


class ReasonForm(Schema):
    """A reason, which every decision of the Desk asks for."""

    reason = fields.String(load_default="", validate=validate.Length(max=2000))


class DecideForm(ReasonForm):
    """Whether a held bottle is analysed."""

    analyse = fields.String(required=True, validate=validate.OneOf(["yes", "no"]))


class VoidForm(Schema):
    """Why a code will hold no water."""

    why = fields.String(required=True, validate=validate.OneOf(desk.VOID_WHYS))


@bp.get("/")
def index() -> str:
    """Show the rounds, those with something open first."""
    now, listed = reading().at, []
    for row in pages().rounds():
        found = pages().findings(now, round_id=row["round"])
        listed.append(
            {
                "round": row,
                "findings": len(found),
                "undecided": rounds.count(pages(), row["round"], "undecided"),
                "totals": rounds.totals(pages(), row["round"]),
                "figures": answers.figures(pages(), row, now),
            }
        )
    listed.sort(key=lambda one: -(one["findings"] + one["undecided"]))
    g.zone = zone = state.zone()
    orphans = [row for row in pages().findings(now) if not row["round"]]
    return render_template(
        "desk/index.html", listed=listed, strangers=rounds.strangers(pages()),
        orphans=[_told(row, zone) for row in orphans], said=said, zone=zone, now=now,
    )  # fmt: skip


@bp.get("/rounds/<round_id>")
def one_round(round_id: str) -> str:
    """Show one round: totals that open their lists, the figure, the table of its visits."""
    row = _round(round_id)
    now, zone = reading().at, row["zone"]
    show = str(request.args.get("show", ""))
    if show and show not in rounds.LISTS and show != "findings":
        abort(404)
    visits = _arranged(
        rounds.table(pages(), round_id, now),
        str(request.args.get("sort", "")),
        str(request.args.get("filter", "")),
    )
    found = pages().findings(now, round_id=round_id, settled=True)
    bottles = rounds.bottles(pages(), round_id, show) if show in rounds.LISTS else []
    return render_template(
        "desk/round.html", round=row, rule=rules.load(row["rule"]), show=show, visits=visits,
        totals=rounds.totals(pages(), round_id), figures=answers.figures(pages(), row, now),
        withheld=answers.withheld(pages(), round_id),
        bottles=bottles, held_for=_held_for(bottles) if show in ("held", "undecided") else {},
        open_findings=[_told(one, zone) for one in found if not one["settled"]],
        settled=[_told(one, zone) for one in found if one["settled"]],
        awaited=[_told(one, zone) for one in rounds.awaited(pages(), round_id, now)],
        undecided=rounds.count(pages(), round_id, "undecided"),
        notes=_out_of_force(row), titles=_protocol_titles(visits),
        sort=request.args.get("sort", ""),
        sought=request.args.get("filter", ""), said=said, zone=zone, now=now,
    )  # fmt: skip


@bp.get("/findings/<finding_id>")
def one_finding(finding_id: str) -> str:
    """Show one finding in a sentence, its evidence, and the way to settle it."""
    row = rounds.finding(pages(), finding_id)
    if row is None:
        raise Unknown(what=words.gettext("finding"), name=finding_id)
    zone = _zone_of(row["round"])
    evidence = [pages().fact(name, private=True) for name in row["evidence"]]
    settlements = rounds.settlements(pages(), row["kind"], row["about"])
    return render_template(
        "desk/finding.html", finding=_told(row, zone),
        evidence=[entry for entry in evidence if entry is not None],
        settlement=next((s for s in settlements if s.fact.finding == finding_id), None),
        former=[s for s in settlements if s.fact.finding != finding_id],
        names=_names(), said=said, zone=zone, now=reading().at,
        still_coming=row["opens_at"] > text(reading().at),
    )  # fmt: skip


@bp.post("/findings/<finding_id>/settle")
def settle(finding_id: str) -> Response:
    """Settle a finding with a reason."""
    form = load(ReasonForm)
    return perform(
        lambda asked, at: desk.settle_finding(asked, at, finding=finding_id, reason=form["reason"]),
        then=url_for(".one_finding", finding_id=finding_id),
    )


@bp.get("/bottles/<bottle>")
def one_bottle(bottle: str) -> str:
    """Show what is recorded of one bottle, entry by entry."""
    row = _bottle(bottle)
    code, zone = row["bottle"], _zone_of(row["round"])
    entries = pages().story(f"bottle:{code}")
    return render_template(
        "desk/bottle.html", bottle=row, visit=pages().visit(row["visit"]),
        entries=[pages().fact(entry.hash, private=True) for entry in entries],
        gone=pages().gone(entry.hash for entry in entries),
        findings=[
            _told(one, zone)
            for one in rounds.findings_about(pages(), f"bottle:{code}", reading().at)
        ],
        deviations=rounds.deviations_on(pages().visit(row["visit"]), row),
        whys=desk.VOID_WHYS, names=_names(), said=said, zone=zone, now=reading().at,
    )  # fmt: skip


@bp.post("/bottles/<bottle>/decide")
def decide(bottle: str) -> Response:
    """Decide whether a held bottle is analysed, before any result exists."""
    form = load(DecideForm)
    return perform(
        lambda asked, at: desk.decide_analysis(
            asked, at, bottle=bottle, analyse=form["analyse"] == "yes", reason=form["reason"]
        ),
        then=url_for(".one_bottle", bottle=bottle),
    )


@bp.post("/bottles/<bottle>/void")
def void(bottle: str) -> Response:
    """Void a code that will hold no water."""
    form = load(VoidForm)
    return perform(
        lambda asked, at: desk.void_bottle(asked, at, bottle=bottle, why=form["why"]),
        then=url_for(".one_bottle", bottle=bottle),
    )


@bp.get("/find")
def find() -> Response:
    """Go to the bottle of a typed code or laboratory number."""
    sought = str(request.args.get("code", "")).strip()
    numbered = pages().by_number(sought)
    if len(numbered) == 1:
        return redirect(url_for(".one_bottle", bottle=numbered[0]), code=303)
    try:
        code = normalise(sought)
    except BadCode:
        flash(
            words.gettext("“{sought}” is neither a code nor one laboratory number here.").format(
                sought=sought
            )
        )
        return redirect(url_for(".index"), code=303)
    return redirect(url_for(".one_bottle", bottle=code), code=303)


def _round(round_id: str) -> Row:
    row = pages().round(round_id)
    if row is None:
        raise Unknown(what=words.gettext("round"), name=round_id)
    g.zone = row["zone"]
    return row


def _bottle(bottle: str) -> Row:
    row = pages().bottle(normalise(bottle))
    if row is None:
        raise Unknown(what=words.gettext("bottle"), name=bottle)
    return row


def _zone_of(round_id: str) -> str:
    row = pages().round(round_id) if round_id else None
    g.zone = str(row["zone"]) if row else state.zone()
    return str(g.zone)


def _names() -> Mapping[str, str]:
    return {row["person"]: row["name"] or row["person"] for row in pages().people()}


def _told(row: Row, zone: str) -> dict[str, Any]:
    """Return a finding with its sentence and where its subject is shown."""
    what, _, name = row["about"].partition(":")
    href = url_for(".one_bottle", bottle=name) if what == "bottle" else ""
    if what == "cooler":
        href = url_for("coolers.one_cooler", cooler=name)
    return {**row, "sentence": said.finding(row, zone, reading().at), "href": href}


def _held_for(bottles: Sequence[Row]) -> dict[str, list[str]]:
    """Return of each held bottle why it waits: the clerk's words, the deviations of its record."""
    held = {}
    for row in bottles:
        receipt: Any = rounds.receipt_of(pages(), row["bottle"])
        seen = (receipt.fact.checks or {}).values() if receipt else ()
        says = [said.of(said.CHECKS, check) for check in seen]
        if receipt and receipt.fact.reason:
            says.append(receipt.fact.reason)
        found = rounds.deviations_on(pages().visit(row["visit"]), row)
        held[row["bottle"]] = says + [said.deviation(one) for one in found]
    return held


def _arranged(
    table: Sequence[Mapping[str, Any]], sort: str, sought: str
) -> list[Mapping[str, Any]]:
    """Return the visits that hold the sought text, in the wanted order."""
    wanted = sought.casefold().strip()
    kept = [
        row
        for row in table
        if any(
            wanted in str(row[name] or "").casefold()
            for name in ("site", "tap", "protocol", "route", "visit", "line")
        )
    ]
    column = sort.removeprefix("-")
    if column not in SORTS:
        return kept
    return sorted(kept, key=lambda row: _key(row, column), reverse=sort.startswith("-"))


def _key(row: Mapping[str, Any], column: str) -> tuple[Any, ...]:
    if column == "deviations":
        return (len(row["deviations"]), row["site"])
    if column == "stand":
        return (row["stand_shortest_s"] or 0, row["site"])
    return (row[column] or "", row["site"])


def _protocol_titles(visits: Sequence[Mapping[str, Any]]) -> dict[str, str]:
    found = {row["sha256"]: pages().protocol(row["sha256"]) for row in visits}
    return {sha256: protocol.title for sha256, protocol in found.items() if protocol}


def _out_of_force(row: Row) -> list[str]:
    """Return a sentence for the rule and each protocol not in force all through the period."""
    period, rule = answers.period_of(row), rules.load(row["rule"])
    notes = []
    if not _holds(rule, period):
        notes.append(
            words.gettext("The rule {title} is not in force for all of this period.").format(
                title=rule.title
            )
        )
    for sha256 in sorted({visit["sha256"] for visit in pages().visits(round_id=row["round"])}):
        protocol = pages().protocol(sha256)
        if protocol is not None and not _holds(protocol, period):
            notes.append(
                words.gettext(
                    "The protocol {title} is not in force for all of this period."
                ).format(title=protocol.title)
            )
    return notes


def _holds(document: Any, period: rules.Period) -> bool:
    """Say whether a document is in force from the first day of the period to the last."""
    # one stretch of days, so its two ends are enough
    return document.in_force_on(period.first) and document.in_force_on(period.last)
