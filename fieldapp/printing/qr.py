"""The QR of a bottle code: eleven characters, always the same 21 modules a side."""

from collections.abc import Iterator, Sequence

from fieldapp.domain import codes
from fieldapp.domain.cards import CARDS, text_of

# Version 1, level M, alphanumeric mode: 21 modules a side, room for 20 characters.
# Source: ISO/IEC 18004, tables of symbol versions and capacities (from memory, check).
SIDE_MODULES = 21
VERSION = 1

# Source: ISO/IEC 18004, quiet zone of four modules on every side (from memory, check).
QUIET_MODULES = 4
OUTER_MODULES = SIDE_MODULES + 2 * QUIET_MODULES

# One mask for all. Trying all eight and scoring them is what makes a code slow to draw (five
# times); every reader learns the mask from the symbol itself.
MASK = 3


def modules(code: str) -> list[list[bool]]:
    """Return the rows of the symbol from the top, true where it is dark, without quiet zone.

    Raises:
        BadCode: ``code`` is no bottle code. Nothing but a code may enter a QR on a bottle.
    """
    return _symbol(codes.normalise(code))


def card_modules(card: str) -> list[list[bool]]:
    """Return the symbol of one of the counter's cards; it holds the card's text and nothing else.

    Raises:
        KeyError: ``card`` is none of ours.
    """
    if card not in CARDS:
        raise KeyError(card)
    return _symbol(text_of(card))


def _symbol(text: str) -> list[list[bool]]:
    from qrcode import QRCode, util
    from qrcode.constants import ERROR_CORRECT_M

    symbol = QRCode(version=VERSION, error_correction=ERROR_CORRECT_M, border=0, mask_pattern=MASK)
    symbol.add_data(util.QRData(text, mode=util.MODE_ALPHA_NUM))
    symbol.make(fit=False)
    return [[bool(module) for module in row] for row in symbol.get_matrix()]


def dark_runs(code: str) -> Iterator[tuple[int, int, int]]:
    """Yield each run of dark modules as (column, row from the bottom, length).

    Columns and rows count from 0 at the outer edge of the quiet zone, so a symbol drawn in a
    box of ``OUTER_MODULES`` a side keeps its distance from whatever stands beside the box.
    """
    yield from runs(modules(code))


def runs(rows: Sequence[Sequence[bool]]) -> Iterator[tuple[int, int, int]]:
    """Yield the dark runs of those rows as ``dark_runs`` does."""
    for number, row in enumerate(reversed(rows)):
        column = 0
        while column < SIDE_MODULES:
            length = 0
            while column + length < SIDE_MODULES and row[column + length]:
                length += 1
            if length:
                yield column + QUIET_MODULES, number + QUIET_MODULES, length
            column += max(length, 1)
