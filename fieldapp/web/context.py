"""What a view needs of the request at hand: the store, the pages, the time, the person, an act."""

from collections.abc import Callable, Mapping, Sequence
from datetime import datetime
from typing import Any, cast

from flask import current_app, g, redirect, request, session
from marshmallow import EXCLUDE, Schema, ValidationError
from werkzeug.wrappers import Response

from fieldapp import identity
from fieldapp.domain.decision import Decision
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.facts import Fact
from fieldapp.domain.recorded import Reading
from fieldapp.projections.pages import Pages
from fieldapp.store import Store

NOT_FIELDS = ("act", "token")


class NoPerson(RuleBroken):
    """Nobody has said who holds this device."""

    kind = "no-person"


class BadForm(Exception):
    """Form fields that cannot be taken, each with its sentence; nothing was recorded."""

    def __init__(self, faults: Mapping[str, Sequence[str]]) -> None:
        self.faults = faults
        super().__init__(str(faults))


def store() -> Store:
    """Return this node's store."""
    return cast(Store, current_app.extensions["tapwitness.store"])


def pages() -> Pages:
    """Return the page tables, one read transaction for the whole request."""
    if "pages" not in g:
        g.lent = store().pages()
        g.pages = g.lent.__enter__()
    return cast(Pages, g.pages)


def give_back(_fault: BaseException | None = None) -> None:
    """End the request's read transaction."""
    lent = g.pop("lent", None)
    g.pop("pages", None)
    if lent is not None:
        lent.__exit__(None, None, None)


def reading() -> Reading:
    """Return this node's time, the same for the whole request."""
    if "reading" not in g:
        g.reading = store().clock.read()
    return cast(Reading, g.reading)


def person() -> str:
    """Return the person chosen on the first page, empty when nobody is."""
    return str(session.get("person", ""))


def new_act() -> str:
    """Mint the id of the act a form will be."""
    return identity.new_act()


def load(schema: type[Schema]) -> dict[str, Any]:
    """Return the form's fields as the schema reads them.

    Raises:
        BadForm: with one sentence a field; answered 422.
    """
    try:
        return dict(schema(unknown=EXCLUDE).load(request.form.to_dict()))
    except ValidationError as fault:
        raise BadForm(fault.normalized_messages()) from fault


def perform(
    decide: Callable[[Pages, Reading], Sequence[Fact] | Decision],
    *,
    then: str,
    fields: Mapping[str, Any] | None = None,
) -> Response:
    """Record the press of this request, once, and go on to what comes next.

    Raises:
        RuleBroken: answered in words by ``web/errors.py``, which goes back to ``then``.
    """
    if not person():
        raise NoPerson()
    g.then = then
    answer = record(decide, fields=fields)
    return redirect(str(answer.get("next") or then), code=303)


def record(
    decide: Callable[[Pages, Reading], Sequence[Fact] | Decision],
    *,
    fields: Mapping[str, Any] | None = None,
) -> Mapping[str, Any]:
    """Record the press of this request, once, and return its answer."""
    act = request.form.get("act", "")
    if len(act) != 36:
        raise BadForm({"act": ["This page is not one of ours. Open it again."]})
    sent = {k: v for k, v in request.form.items(multi=False) if k not in NOT_FIELDS}
    give_back()  # what is read inside the act must not be older than the act
    given = {"path": request.path, **(sent if fields is None else fields)}
    return store().act(act, given, decide, by=person()).answer


def local(at: datetime | str) -> datetime:
    """Return an instant given as text or aware datetime."""
    if isinstance(at, str):
        return datetime.fromisoformat(at)
    return at
