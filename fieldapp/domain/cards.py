"""The cards of the counter: a fault is scanned before its bottle, without a hand on the keyboard.

What stands in a card's QR begins with a word that has a U. No bottle code holds one, so a card is
never taken for a bottle, nor a torn card for a code; laboratory numbers that begin so are refused.
"""

FIRST = "COUNTER"
"""The word that every card begins with."""

UNDO = "undo"

CARDS: dict[str, str] = {
    "leak": "leaks",
    "low": "low",
    "label": "label",
    "cracked": "cracked",
    "no record": "record",
    "hold": "hold",
    UNDO: "",
}
"""Each card's word and the check that its bottle fails; ``undo`` takes the last scan back."""


def text_of(card: str) -> str:
    """Return what the QR of that card holds: capitals, blanks, nothing a keyboard would bend."""
    return f"{FIRST} {card}".upper()


def is_card(scanned: str) -> bool:
    """Say whether a scan begins like a card, known or not."""
    return scanned.strip().upper().startswith(FIRST)


def read_card(scanned: str) -> str:
    """Return the card's word, empty where the scan is none of our cards.

    Case and the number of blanks do not matter: a scanner may type with the shift key locked.
    """
    first, _, rest = " ".join(scanned.upper().split()).partition(" ")
    word = rest.lower()
    return word if first == FIRST and word in CARDS else ""
