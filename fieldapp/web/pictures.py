"""The photos of a visit as its pages list them."""

from typing import Any

from fieldapp import photos
from fieldapp.domain.facts import PhotoTaken
from fieldapp.web.context import pages, store


def of_visit(visit: str, *, private: bool) -> list[dict[str, Any]]:
    """Return the photos that stand of a visit, the latest last.

    ``private`` shows what was written under them: on the visit's own pages, while it is at hand.
    """
    return [
        {
            "photo": entry.fact.photo,
            "at": entry.done_at,
            "about": entry.fact.about,
            "caption": entry.fact.caption,
            "paper": entry.fact.media != photos.JPEG,
            "here": photos.find(entry.fact.photo, store().folder) is not None,
        }
        for one in pages().recorded(visit)
        if isinstance(one.fact, PhotoTaken)
        and (entry := pages().fact(one.hash, private=private)) is not None
        and isinstance(entry.fact, PhotoTaken)
    ]
