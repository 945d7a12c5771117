"""Label paper: sheets of labels and rolls. All lengths are millimetres, measured from top left.

CannotPrint
├── BadSheet   the paper is described in a way that cannot be, or its labels do not fit on it
└── BadLabel   (``labels.py``) a bottle cannot be put on a label
"""

import re
from dataclasses import dataclass

from fieldapp.words import gettext as _

POINTS_A_MM = 72 / 25.4

# ISO 216, and the North American letter sheet of 8.5 by 11 inches.
PAGES_MM = {"a4": (210.0, 297.0), "letter": (215.9, 279.4)}

# Below this a code cannot be read at arm's length beside a QR that a tablet can read; our choice.
MIN_LABEL_MM = (40.0, 20.0)
MAX_PAGE_MM = 1000.0
MAX_LABELS_A_SIDE = 60

# Sizes given in inches and rounded to a tenth of a millimetre may seem to overhang by this much.
ROUNDING_MM = 0.05


class CannotPrint(ValueError):
    """Nothing was printed; the message says why and what would be right."""


class BadSheet(CannotPrint):
    """The label paper described cannot be, or its labels do not fit on the page."""


@dataclass(frozen=True)
class Sheet:
    """Labels in columns and rows on one page; ``marks`` draws cutting marks in its margins.

    ``page`` is ``letter``, ``a4`` or (width, height).

    Raises:
        BadSheet: The labels are too small or do not fit on the page.
    """

    page: str | tuple[float, float]
    columns: int
    rows: int
    label_width_mm: float
    label_height_mm: float
    left_mm: float
    top_mm: float
    gap_x_mm: float = 0.0
    gap_y_mm: float = 0.0
    marks: bool = False

    def __post_init__(self) -> None:
        _require_page(self.page)
        _require_label(self.label_width_mm, self.label_height_mm)
        for count in (self.columns, self.rows):
            if not 1 <= count <= MAX_LABELS_A_SIDE:
                text = _("{count} labels beside each other cannot be: 1 to {most} can.")
                raise BadSheet(text.format(count=count, most=MAX_LABELS_A_SIDE))
        if min(self.left_mm, self.top_mm, self.gap_x_mm, self.gap_y_mm) < 0:
            raise BadSheet(_("Margins and gaps of a sheet are 0 mm or more."))
        page_width, page_height = self.page_mm
        across = (self.columns, self.label_width_mm, self.gap_x_mm, self.left_mm, page_width)
        down = (self.rows, self.label_height_mm, self.gap_y_mm, self.top_mm, page_height)
        _require_fit(_("across"), *across)
        _require_fit(_("down"), *down)

    @property
    def page_mm(self) -> tuple[float, float]:
        """Width and height of the page."""
        return PAGES_MM[self.page] if isinstance(self.page, str) else self.page

    @property
    def labels_a_page(self) -> int:
        return self.columns * self.rows

    def corner_mm(self, place: int) -> tuple[float, float]:
        """Return the top left corner of the label at that place, counted from 0 row by row."""
        row, column = divmod(place, self.columns)
        left = self.left_mm + column * (self.label_width_mm + self.gap_x_mm)
        top = self.top_mm + row * (self.label_height_mm + self.gap_y_mm)
        return left, top


@dataclass(frozen=True)
class Roll:
    """Labels on a roll: each is a page of its own.

    Raises:
        BadSheet: The label is too small, or larger than any page.
    """

    width_mm: float
    height_mm: float

    def __post_init__(self) -> None:
        _require_label(self.width_mm, self.height_mm)
        _require_page((self.width_mm, self.height_mm))

    def as_sheet(self) -> Sheet:
        """Return the page of one label that this roll amounts to."""
        page = (self.width_mm, self.height_mm)
        return Sheet(page, 1, 1, self.width_mm, self.height_mm, left_mm=0, top_mm=0)


EXAMPLE = "3x10,66.7x25.4,left=4.8,top=12.7,gap=3.2x0,page=letter"
_NUMBER = r"\d{1,4}(?:\.\d{1,3})?"
_PAIR = re.compile(rf"({_NUMBER})[x×]({_NUMBER})", re.IGNORECASE | re.ASCII)
_COUNTS = re.compile(r"(\d{1,4})[x×](\d{1,4})", re.IGNORECASE | re.ASCII)
_OPTIONS = ("page", "left", "top", "gap")


def parse_sheet(text: str) -> Sheet:
    """Return the sheet written as ``3x10,66.7x25.4,left=4.8,top=12.7,gap=3.2x0,page=letter``.

    First columns x rows, then width x height of one label in millimetres; ``page`` must follow,
    the others may. Without ``left`` or ``top`` the labels stand in the middle; ``gap`` is 0x0.

    Raises:
        BadSheet: A part cannot be read, is missing, twice there or unknown, or does not fit.
    """
    parts = [part.strip() for part in text.split(",")]
    if len(parts) < 2:
        message = _("The sheet “{text}” is too short. Write it like {example}.")
        raise BadSheet(message.format(text=text, example=EXAMPLE))
    counts = _COUNTS.fullmatch(parts[0])
    if not counts:
        raise BadSheet(_unreadable(parts[0], _("columns x rows, like 3x10")))
    columns, rows = int(counts[1]), int(counts[2])
    width, height = _pair(parts[1], _("width x height of a label in mm, like 66.7x25.4"))
    options = _options(parts[2:])
    page = _page(options)
    page_width, page_height = PAGES_MM[page] if isinstance(page, str) else page
    gap_x, gap_y = _pair(options.get("gap", "0x0"), _("two gaps in mm, like gap=3.2x0"))
    left = _margin(options, "left", page_width, columns * width + (columns - 1) * gap_x)
    top = _margin(options, "top", page_height, rows * height + (rows - 1) * gap_y)
    return Sheet(page, columns, rows, width, height, left, top, gap_x, gap_y)


def parse_roll(text: str) -> Roll:
    """Return the roll whose labels are written as width x height in millimetres: ``62x29``.

    Raises:
        BadSheet: The text cannot be read, or the label is too small.
    """
    return Roll(*_pair(text.strip(), _("width x height of a label in mm, like 62x29")))


def _options(parts: list[str]) -> dict[str, str]:
    options: dict[str, str] = {}
    for part in parts:
        name, equals, value = (piece.strip() for piece in part.partition("="))
        name = name.lower()
        if not equals or name not in _OPTIONS:
            text = _("“{part}” of the sheet is not known. It may say page=, left=, top= and gap=.")
            raise BadSheet(text.format(part=part))
        if name in options:
            raise BadSheet(_("The sheet says {name}= twice. Say it once.").format(name=name))
        options[name] = value
    return options


def _page(options: dict[str, str]) -> str | tuple[float, float]:
    wanted = _("page=letter, page=a4 or page=210x297 (width x height in mm)")
    if "page" not in options:
        raise BadSheet(_("The sheet names no page. Add {wanted}.").format(wanted=wanted))
    name = options["page"].lower()
    return name if name in PAGES_MM else _pair(name, wanted)


def _margin(options: dict[str, str], name: str, page_mm: float, labels_mm: float) -> float:
    if name not in options:
        return max(page_mm - labels_mm, 0.0) / 2
    if not re.fullmatch(_NUMBER, options[name], re.ASCII):
        wanted = _("a number of mm, like {name}=4.8").format(name=name)
        raise BadSheet(_unreadable(f"{name}={options[name]}", wanted))
    return float(options[name])


def _pair(text: str, wanted: str) -> tuple[float, float]:
    found = _PAIR.fullmatch(text)
    if not found:
        raise BadSheet(_unreadable(text, wanted))
    return float(found[1]), float(found[2])


def _unreadable(part: str, wanted: str) -> str:
    return _("“{part}” cannot be read. Write {wanted}.").format(part=part, wanted=wanted)


def _require_label(width_mm: float, height_mm: float) -> None:
    least_width, least_height = MIN_LABEL_MM
    if width_mm >= least_width and height_mm >= least_height:
        return
    text = _(
        "A label of {width} x {height} mm is too small to hold code, QR and room for a pen. "
        "The smallest is {least_width} x {least_height} mm."
    )
    sizes = {"width": width_mm, "height": height_mm}
    least = {"least_width": least_width, "least_height": least_height}
    raise BadSheet(text.format(**_written(sizes | least)))


def _require_page(page: str | tuple[float, float]) -> None:
    if isinstance(page, str):
        if page not in PAGES_MM:
            text = _("The page “{page}” is not known. It may be letter, a4 or width and height.")
            raise BadSheet(text.format(page=page))
        return
    if not all(0 < side <= MAX_PAGE_MM for side in page):
        text = _("A page of {width} x {height} mm cannot be. A side is at most {most} mm.")
        sizes = {"width": page[0], "height": page[1], "most": MAX_PAGE_MM}
        raise BadSheet(text.format(**_written(sizes)))


def _require_fit(
    way: str, count: int, label_mm: float, gap_mm: float, before_mm: float, page_mm: float
) -> None:
    needed = before_mm + count * label_mm + (count - 1) * gap_mm
    if needed <= page_mm + ROUNDING_MM:
        return
    text = _(
        "The labels do not fit on the page: {way}, {count} of {label} mm with gaps of {gap} mm, "
        "beginning at {before} mm, end at {needed} mm; the page ends at {page} mm."
    )
    lengths = {"label": label_mm, "gap": gap_mm, "before": before_mm, "needed": needed}
    raise BadSheet(text.format(way=way, count=count, **_written(lengths | {"page": page_mm})))


def _written(lengths_mm: dict[str, float]) -> dict[str, str]:
    return {name: f"{length:.2f}".rstrip("0").rstrip(".") for name, length in lengths_mm.items()}


# For plain adhesive paper, cut along the marks: 24 labels on the part that A4 and Letter have in
# common (210 by 279.4 mm), so that either paper may lie in the tray. Wide enough for a pen.
DEFAULT_SHEET = Sheet(
    page=(210.0, 279.4),
    columns=3,
    rows=8,
    label_width_mm=64.0,
    label_height_mm=32.0,
    left_mm=9.0,
    top_mm=11.7,
    marks=True,
)
