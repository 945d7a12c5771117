"""The bottle rail: one outline a draw, filling as they are drawn.

SVG of attributes and classes only: the policy of every page drops ``style=`` (design 6), so
colour and stroke come from ``rail.css``.
"""

from collections.abc import Collection, Sequence

from markupsafe import Markup

from fieldapp.domain.protocols.standing import DrawStanding
from fieldapp.web.shown import code
from fieldapp.words import gettext as _

GLASS = "M11 5h12v8c0 4 8 6 8 14v22c0 4-3 6-6 6H9c-3 0-6-2-6-6V27c0-8 8-10 8-14z"
FOOT, NECK = 55, 27
"""Where the water stands on, and where it stands when the bottle is full to its line."""
LEVELS = {"line": 1.0, "below": 0.72, "over": 1.2, "spilled": 0.85}
RUNNING = 0.5
MANY = 8
"""From so many draws on the outlines are small."""

STATES = {
    "waiting": "not yet",
    "set": "in place",
    "running": "running",
    "filled": "filled",
    "poured": "poured away",
}


def rail(draws: Sequence[DrawStanding], now: Collection[int] = ()) -> Markup:
    """Return the rail of a visit's draws; those in ``now`` are drawn larger."""
    items = Markup("").join(_item(one, one.draw in now) for one in draws)
    many = " rail--many" if len(draws) >= MANY else ""
    return Markup('<ol class="rail{}" aria-label="{}">{}</ol>').format(many, _("Bottles"), items)


def _item(draw: DrawStanding, now: bool) -> Markup:
    look = f"rail__draw--{draw.state}"
    if not draw.keep and draw.state != "poured":
        look += " rail__draw--tipped"
    if now:
        look += " rail__draw--now"
    said = [_("Draw {n}").format(n=draw.draw), _(STATES.get(draw.state, draw.state))]
    if draw.bottle:
        said.append(code(draw.bottle))
    return Markup(
        '<li class="rail__draw {}">{}<span aria-hidden="true">{}</span>'
        '<span class="unseen">{}</span></li>'
    ).format(look, _bottle(draw), draw.draw, ", ".join(said))


def _bottle(draw: DrawStanding) -> Markup:
    level = _level(draw)
    water = Markup("")
    if level:
        name = f"glass-{draw.draw}"
        height = round((FOOT - NECK) * level, 1)
        water = Markup(
            '<clipPath id="{}"><path d="{}"/></clipPath>'
            '<rect class="rail__water" x="0" y="{}" width="34" height="{}" clip-path="url(#{})"/>'
        ).format(name, GLASS, round(FOOT - height, 1), height, name)
    label = Markup("")
    if draw.bottle:
        label = Markup('<rect class="rail__label" x="9" y="33" width="16" height="10" rx="1"/>')
    drop = Markup("")
    if draw.state == "poured":
        drop = Markup(
            '<path class="rail__drop" d="M17 33c4 6 6 8 6 11a6 6 0 0 1-12 0c0-3 2-5 6-11z"/>'
        )
    return Markup(
        '<svg viewBox="0 0 34 58" aria-hidden="true" focusable="false">{}'
        '<path class="rail__glass" d="{}"/>{}{}'
        '<rect class="rail__cap" x="9" y="0" width="16" height="5" rx="1.5"/></svg>'
    ).format(water, GLASS, label, drop)


def _level(draw: DrawStanding) -> float:
    if draw.state == "filled":
        return LEVELS.get(draw.fill, 1.0)
    return RUNNING if draw.state == "running" else 0.0
