"""Print a route's labels: codes are issued, recorded and only then put on paper (R15, R16)."""

import base64
import io
from collections.abc import Callable
from typing import Any

from fieldapp.commands import plan
from fieldapp.domain.decision import Decision
from fieldapp.domain.recorded import Reading
from fieldapp.identity import new_act
from fieldapp.printing.labels import Label, labels_pdf
from fieldapp.printing.sheets import BadSheet, parse_roll, parse_sheet
from fieldapp.projections.pages import Pages
from fieldapp.store import Store
from fieldapp.words import gettext as _
from fieldapp.words import word


def print_labels(
    store: Store,
    *,
    route: str,
    spare: int = 0,
    sheet: str = "",
    roll: str = "",
    progress: Callable[..., None],
) -> dict[str, Any]:
    """Issue what lacks a code and draw the labels.

    Args:
        route: The route's id.
        spare: How many spares on it in all.
        sheet: Geometry of a sheet, empty for our own.
        roll: Geometry of a roll, one label a page.

    Returns:
        ``codes`` in order, ``issued`` anew, ``pdf`` as base64.

    Raises:
        CannotPrint: The paper cannot be; no code was issued for it.
    """
    if sheet and roll:  # before a code is issued for paper that cannot be
        raise BadSheet(_("Labels go on a sheet or on a roll. Name one of them."))
    paper = {
        "sheet": parse_sheet(sheet) if sheet else None,
        "roll": parse_roll(roll) if roll else None,
    }
    answer = store.act(
        new_act(),
        {"labels": route, "spare": spare},
        lambda pages, reading: _decide(store, pages, reading, route, spare),
        by="",
    )
    codes = list(answer.answer["codes"])
    with store.pages() as pages:
        labels = [label_of(pages, code) for code in codes]
    out = io.BytesIO()
    labels_pdf(labels, out, progress=lambda done, of: progress("labels", done, of), **paper)
    return {**answer.answer, "pdf": base64.b64encode(out.getvalue()).decode()}


def _decide(store: Store, pages: Pages, _reading: Reading, route: str, spare: int) -> Decision:
    facts, codes = plan.issue_bottles(
        pages, route, spare=spare, issuing=imported_here(store, pages, route)
    )
    issued = sum(1 for given in facts if given.kind == "bottle.issued")
    return Decision(facts, {"route": route, "codes": codes, "issued": issued})


def imported_here(store: Store, pages: Pages, route: str) -> bool:
    """Say whether this node wrote the plan of the route: only then it issues its codes."""
    logs = {
        entry.log for entry in pages.story(f"route:{route}") if entry.fact.kind == "route.planned"
    }
    return bool(logs & set(store.own_logs(pages.db)))


def label_of(pages: Pages, code: str) -> Label:
    """Return what the label of that bottle says; never a name or an address (R16)."""
    row = pages.bottle(code)
    if row is None:
        return Label(code=code)
    return Label(
        code=code,
        site=str(row["site"]),
        draw=int(row["draw"]),
        draw_words=draw_words(int(row["draw"]), str(row["kind"])),
        volume_ml=int(row["volume_ml"]),
        analyse=tuple(row["analyse"]),
        preservative=str(row["preservative"]),
        route=str(row["route"]),
        purpose_words="" if row["purpose"] in ("", "compliance") else word(row["purpose"]),
        note=_("Sealed laboratory water only.") if row["kind"] == "blank" else "",
    )


def draw_words(draw: int, kind: str) -> str:
    """Return a draw in words, ``Draw 5 · fifth litre``."""
    if not draw:
        return ""
    if kind == "blank":
        return _("Field blank")
    return _("Draw {draw} · {kind}").format(draw=draw, kind=word(kind))
