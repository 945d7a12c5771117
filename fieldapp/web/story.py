"""The story of a bottle or a visit, for every place: one page from label to result, to be printed.

A recorded fact is corrected from here. Nothing private of residents stands on a story (R6).
"""

from collections.abc import Mapping, Sequence
from typing import Any

from flask import Blueprint, g, render_template, request, url_for
from werkzeug.wrappers import Response

from fieldapp import words
from fieldapp.commands import corrections
from fieldapp.commands.asked import planned
from fieldapp.domain.codes import normalise
from fieldapp.domain.errors import RuleBroken, StepOver, Unknown
from fieldapp.domain.facts import Fact
from fieldapp.domain.recorded import Reading, Recorded
from fieldapp.projections import rounds
from fieldapp.projections.pages import Pages
from fieldapp.store import ActDiffers
from fieldapp.web import entry_words, people, said, spoken, state, story_forms, story_lines
from fieldapp.web.context import NoPerson, give_back, load, pages, perform, person, reading

bp = Blueprint("story", __name__, url_prefix="/story")

UNPROCESSABLE = 422
LEFT_TO_ERRORS = (StepOver, Unknown, NoPerson, ActDiffers)


@bp.get("/<bottle>")
def bottle(bottle: str) -> str:
    """Show all that is known of one bottle, line by line."""
    known = normalise(bottle)
    row = pages().bottle(known)
    if row is None:
        raise Unknown(what=words.gettext("bottle"), name=bottle)
    zone = _zone(str(row["round"]))
    entries = story_lines.of_bottle(pages(), known, row)
    visit = pages().visit(row["visit"])
    found = rounds.findings_about(pages(), f"bottle:{known}", reading().at)
    return _page(
        "bottle", entries, zone, bottle=row, told=visit,
        deviations=rounds.deviations_on(visit, row), findings=found,
    )  # fmt: skip


@bp.get("/visits/<visit>")
def visit(visit: str) -> str:
    """Show all that was recorded of one visit, line by line."""
    plan = planned(pages(), visit)
    zone = _zone(plan.round)
    row = pages().visit(visit)
    found = rounds.findings_about(pages(), f"visit:{visit}", reading().at)
    deviations = (row or {}).get("deviations") or ()
    return _page(
        "visit", story_lines.of_visit(pages(), visit), zone, told=row, plan=plan,
        deviations=deviations, findings=found, bottles=pages().bottles(visit=visit),
    )  # fmt: skip


@bp.get("/entries/<entry>")
def entry(entry: str) -> str:
    """Show one entry as it stands, with the form that corrects it."""
    return _entry_page(entry)


@bp.post("/entries/<entry>")
def correct(entry: str) -> Response | tuple[str, int]:
    """Correct an entry: the old value stays, struck through."""
    form = load(story_forms.CorrectForm)
    found = _entry(entry)
    zone, by = _zone_of(found), person()

    def decide(p: Pages, r: Reading) -> Sequence[Fact]:
        given = p.fact(entry, private=True) or found
        changes = story_forms.changes_of(p, given, form, zone)
        done_at = story_forms.done_at_of(given, form, zone)
        return corrections.correct(
            p, r, of=entry, changes=changes, reason=form["reason"], by=by, done_at=done_at
        )

    try:
        return perform(decide, then=_home(found))
    except LEFT_TO_ERRORS:
        raise
    except RuleBroken as fault:
        give_back()
        g.pop("reading", None)
        return _entry_page(entry, spoken.broken(fault), request.form.to_dict()), UNPROCESSABLE


def _entry_page(name: str, says: str = "", sent: Mapping[str, str] | None = None) -> str:
    found = _entry(name)
    zone = _zone_of(found)
    return render_template(
        "story/entry.html",
        entry=found,
        fields=story_forms.shown_fields(pages(), found, zone),
        entry_says=entry_words.says(found, zone),
        may=corrections.may_correct(pages(), found, person()),
        over=bool(pages().gone([name])),
        done_local=story_forms.local(found.done_at, zone),
        home=_home(found), says=says, sent=sent or {}, zone=zone, now=reading().at,
        names=_names(), said=said,
    )  # fmt: skip


def _entry(name: str) -> Recorded:
    found = pages().fact(name, private=True)
    if found is None:
        raise Unknown(what=words.gettext("entry"), name=name[:8])
    return found


def _home(found: Recorded) -> str:
    """Return the story in which an entry is read: its visit's, else its bottle's."""
    visit, code = (str(getattr(found.fact, name, "")) for name in ("visit", "bottle"))
    if visit:
        return url_for(".visit", visit=visit)
    return url_for(".bottle", bottle=code) if code else url_for("people.first")


def _zone_of(found: Recorded) -> str:
    row = pages().visit(str(getattr(found.fact, "visit", "")))
    row = row or pages().bottle(str(getattr(found.fact, "bottle", "")))
    return _zone(str(row["round"]) if row else "")


def _zone(round_id: str) -> str:
    row = pages().round(round_id) if round_id else None
    g.zone = str(row["zone"]) if row else state.zone()
    return str(g.zone)


def _names() -> Mapping[str, str]:
    return {row["person"]: row["name"] or row["person"] for row in pages().people()}


def _page(kind: str, entries: Sequence[Recorded], zone: str, **more: Any) -> str:
    found = story_lines.lines(pages(), entries, zone, person())
    now = reading().at
    more["findings"] = [said.finding(row, zone, now) for row in more["findings"]]
    return render_template(
        f"story/{kind}.html", days=story_lines.by_day(found, zone), count=len(found),
        names=_names(), said=said, zone=zone, now=now, places=people.places(),
        desk="desk" in people.places(), kitchen="kitchen" in people.places(), **more,
    )  # fmt: skip
