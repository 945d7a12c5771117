"""Every code on every page opens that bottle's story (R25)."""

import re

from flask import url_for
from markupsafe import Markup, escape

from fieldapp.domain.codes import ALPHABET

_GROUPED = re.compile(
    rf"(?<![\w-])([{ALPHABET}]{{4}})-([{ALPHABET}]{{4}})-([{ALPHABET}]{{3}})(?![\w-])"
)


def linked(text: object) -> Markup:
    """Return a sentence with each bottle code in it as a link to its story."""
    return Markup(_GROUPED.sub(_link, str(escape(text))))


def _link(found: re.Match[str]) -> str:
    href = url_for("story.bottle", bottle="".join(found.groups()))
    return f'<a class="code" href="{href}">{found[0]}</a>'
