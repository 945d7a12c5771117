"""How a press in the Kitchen is answered: recorded once, then the present step; or a sentence."""

from collections.abc import Callable, Mapping, Sequence
from typing import Any

from flask import flash, g, redirect, render_template, request, url_for
from marshmallow import Schema
from werkzeug.wrappers import Response

from fieldapp.commands import drawing
from fieldapp.commands.asked import When
from fieldapp.domain.errors import NotDue, RuleBroken, StepOver, Unknown
from fieldapp.domain.facts import Fact
from fieldapp.domain.recorded import Reading
from fieldapp.projections.pages import Pages
from fieldapp.store import ActDiffers
from fieldapp.web import kitchen_forms as forms
from fieldapp.web import kitchen_pages as shown_as
from fieldapp.web import spoken
from fieldapp.web.context import NoPerson, give_back, load, perform

Answer = Response | str | tuple[str, int]
Decide = Callable[[Pages, Reading], Sequence[Fact]]
Timed = Callable[[Pages, Reading, When], Sequence[Fact]]
UNPROCESSABLE = 422
BARS = (drawing.WrongBottle, drawing.AlreadyFilled, drawing.BottleVoid)
"""A bottle that stands against a rule; beside it stand the three ways (R1)."""
LEFT_TO_ERRORS = (StepOver, Unknown, NoPerson, ActDiffers)
"""What ``web/errors.py`` answers for every place alike."""


def act(
    visit: str, schema: type[Schema], command: Callable[..., list[Fact]], *names: str
) -> Answer:
    """Record one command with the named fields of its form."""
    form = load(schema)
    given = {name: form[name] for name in names}
    return act_timed(visit, lambda p, r, when: command(p, r, visit, **given, when=when), form)


def act_timed(visit: str, decide: Timed, form: Mapping[str, Any], *, then: str = "") -> Answer:
    """Record what ``decide`` answers, told when it was done by the form."""
    zone = shown_as.zone_of(visit)
    return press(visit, lambda p, r: decide(p, r, forms.when_of(form, zone)), then=then)


def press(visit: str, decide: Decide, *, then: str = "") -> Answer:
    """Record, then go to the present step of that visit, or of the one ``then`` names.

    A broken rule is said above the step; nothing was recorded.
    """
    shown_as.zone_of(visit)
    then = url_for("kitchen.visit", visit=then or visit)
    try:
        return perform(decide, then=then)
    except NotDue as fault:
        flash(spoken.broken(fault))
        return redirect(then, code=303)
    except LEFT_TO_ERRORS:
        raise
    except RuleBroken as fault:
        return refused(visit, fault)


def refused(visit: str, fault: RuleBroken) -> Answer:
    """Show the form again with the sentence; a bottle of elsewhere gets its three ways (R1)."""
    give_back()
    g.pop("reading", None)
    says, sent = spoken.broken(fault), request.form.to_dict()
    if isinstance(fault, BARS):
        return wrong_bottle(visit, says, fault.values), UNPROCESSABLE
    if request.path.endswith(("/done", "/ran")):
        return done(visit, sent, says), UNPROCESSABLE
    if request.path.endswith(("/different", "/swap")):
        return different(visit, says), UNPROCESSABLE
    return shown_as.show_visit(visit, says=says, sent=sent), UNPROCESSABLE


def different(visit: str, says: str = "") -> str:
    """Return the page of what may be different."""
    found = shown_as.gather(visit)
    return _page("different", found, says=says, **shown_as.different_choices(found))


def done(visit: str, sent: Mapping[str, str], says: str = "") -> str:
    """Return the page that asks what was done already."""
    found = shown_as.gather(visit)
    runs = found["due"].kind == "run" and not sent.get("draws")
    page = "ran" if runs else "done"
    return _page(page, found, says=says, sent=sent, **shown_as.different_choices(found))


def wrong_bottle(visit: str, says: str, fault: Mapping[str, Any]) -> str:
    """Return the bar before a bottle that belongs elsewhere or is full."""
    return _page("wrong-bottle", shown_as.gather(visit), says=says, fault=fault)


def _page(name: str, found: Mapping[str, Any], **more: Any) -> str:
    return render_template(f"kitchen/{name}.html", spoken=spoken, **{**found, **more})
