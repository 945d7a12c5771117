"""Photo notes: a picture that this node keeps already, said to be of a visit or a part of it."""

from fieldapp.commands.asked import NOW, Asked, When, check_past, planned
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.facts import DeviationStated, Fact, PhotoTaken
from fieldapp.domain.recorded import Reading

VISIT, BOTTLE, ENTRY = "visit", "bottle", "entry"


class StrangeSubject(RuleBroken):
    """``about`` is nothing of this visit that a photo can be of."""

    kind = "strange-subject"


def subjects(pages: Asked, visit: str) -> list[tuple[str, str]]:
    """Return what a photo of this visit may be of, each with its sort; the visit itself first.

    A bottle is one of this visit; an entry is a deviation that was stated there and stands.
    """
    planned(pages, visit)
    found = [(VISIT, f"{VISIT}:{visit}")]
    found += [(BOTTLE, f"{BOTTLE}:{row['bottle']}") for row in pages.bottles(visit=visit)]
    found += [
        (ENTRY, f"{ENTRY}:{one.hash}")
        for one in pages.recorded(visit)
        if isinstance(one.fact, DeviationStated)
    ]
    return found


def take(
    pages: Asked,
    reading: Reading,
    visit: str,
    *,
    photo: str,
    n: int,
    media: str,
    about: str = "",
    caption: str = "",
    when: When = NOW,
) -> list[Fact]:
    """Note a photo, at any time: before the door, in the visit, after it was closed (R1).

    Args:
        pages: What this node knows.
        reading: Its time.
        visit: The visit.
        photo: SHA-256 of the file as kept, in hexadecimal; the file is on disk already.
        n: Its bytes.
        media: Its media type.
        about: One of ``subjects``; empty for the visit.
        caption: In the sampler's words; it stays private.
        when: When the picture was taken, where that was not now.

    Raises:
        StrangeSubject: It is about something that is not of this visit.
    """
    known = [subject for _, subject in subjects(pages, visit)]
    check_past(when, reading)
    if (about or known[0]) not in known:
        raise StrangeSubject(about=about[:40])
    return [
        PhotoTaken(
            about=about or known[0], photo=photo, n=n, media=media, visit=visit,
            caption=caption.strip(), **when.fields(),
        )
    ]  # fmt: skip
