"""Labels by the program, against the vectors on them drawn again with nothing left to decide.

The peers are handed what stands on the program's own pages: the same modules, lines of text and
rules at the same places, which every run looks at. They make no QR, measure no text and fit
nothing; what they take is drawing alone.
"""

import io
import statistics
from collections.abc import Callable
from typing import BinaryIO

from fieldapp.domain.codes import new_code
from fieldapp.printing.labels import Label, labels_pdf
from tests.bench.measured import Measured, timed
from tests.bench.vectors import calls, draw_as_text, draw_by_calls, read_pages, require_same

LABELS = 1_000
TURNS = 5

Drawing = Callable[[BinaryIO], None]


def labels() -> list[Measured]:
    """Measure a large round's labels, by turns with both peers; medians of the turns."""
    wanted = [_label(number) for number in range(LABELS)]
    pages = read_pages(_pdf(lambda out: labels_pdf(wanted, out)))
    called = [list(calls(page)) for page in pages]
    drawings: list[Drawing] = [
        lambda out: labels_pdf(wanted, out),
        lambda out: draw_by_calls(called, out),
        lambda out: draw_as_text(pages, out),
    ]
    for drawing in drawings:
        require_same(pages, read_pages(_pdf(drawing)))
    turns = [[timed(lambda one=drawing: _pdf(one)) for drawing in drawings] for _ in range(TURNS)]
    ours, by_calls, as_text = (statistics.median(run) for run in zip(*turns, strict=True))
    return [
        Measured(f"{LABELS:,} labels, against the same calls to the canvas", ours, by_calls, 3.0),
        Measured(f"{LABELS:,} labels, against the same vectors as text", ours, as_text, 6.0),
    ]


def _pdf(drawing: Drawing) -> bytes:
    out = io.BytesIO()
    drawing(out)
    return out.getvalue()


def _label(number: int) -> Label:
    """Return a label of a route that mixes first litres, pairs, blanks with acid and spares."""
    code, site = new_code(), f"Q-{number:04}"
    kind = ("first", "first", "pair", "pair", "pair", "spare", "acid", "blank")[number % 8]
    if kind == "spare":
        return Label(code, volume_ml=1000)
    if kind == "blank":
        note = "Sealed laboratory water only."
        return Label(code, site, 1, "Field blank", 1000, ("lead",), route="R-0504", note=note)
    words = {"pair": "Draw 5 · fifth litre"}.get(kind, "Draw 1 · first litre")
    acid = "acid" if kind == "acid" else "none"
    return Label(
        code, site, 5 if kind == "pair" else 1, words, 1000, ("lead", "copper"), acid, "R-0504"
    )
