"""The crate at the end of a route: bottles into coolers, seals on, handed over (R17)."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from urllib.parse import urlsplit

from fieldapp.rehearsal.browser import Browser, Page, Trouble
from fieldapp.rehearsal.day import Load


@dataclass(frozen=True, slots=True)
class Cooler:
    """A load that was handed over: the id the tablet gave it, and the codes that are in it."""

    cooler: str
    load: Load
    codes: tuple[str, ...]


class Crate:
    """The bottles of one route, by visit, as they stand in the sampler's crate."""

    def __init__(self, browser: Browser, route: str, bottles: Mapping[str, Sequence[str]]) -> None:
        self.browser, self.route = browser, route
        self._left = {visit: list(codes) for visit, codes in bottles.items()}

    def leave_behind(self, codes: Sequence[str]) -> None:
        """Say of full bottles that they were left behind; they go into no cooler."""
        for code in codes:
            page = self._count()
            given = {"how": "left-behind"}
            self.browser.press(page, page.form("/locate", bottle=code), given)
            for bottles in self._left.values():
                if code in bottles:
                    bottles.remove(code)

    def close(self, loads: Sequence[Load], names: Mapping[str, str]) -> list[Cooler]:
        """Pack, seal and hand over every load; ``names`` are the people's.

        A load that no full bottle is left for is none.

        Raises:
            Trouble: A page asks for something else than the script has.
        """
        packed = [one for load in loads if (one := self._pack(load)) is not None]
        for one in packed:
            page = self._count()
            form = page.form(f"/coolers/{one.cooler}/seal")
            numbers = {f"seal_{n}": number for n, number in enumerate(one.load.seals, start=1)}
            self.browser.press(page, form, {**numbers, "count": str(len(one.codes))})
        for one in packed:
            page = self.browser.open(f"/kitchen/coolers/{one.cooler}")
            form = page.form(f"/coolers/{one.cooler}/relinquish")
            given = {"to": one.load.to, "name": names.get(one.load.taken_by, "")}
            self.browser.press(page, form, given)
        return packed

    def _pack(self, load: Load) -> Cooler | None:
        page = self._count()
        before = _coolers(page)
        codes = [code for visit in load.visits or tuple(self._left) for code in self._take(visit)]
        if not codes:
            return None
        for given in [{"code": code} for code in codes] if load.visits else [{"all": "yes"}]:
            page = self.browser.press(page, page.form("/pack"), {"box": load.box, **given})
        (made,) = _coolers(page) - before or {""}
        if not made:
            raise Trouble(f"{page.url} shows no cooler of box {load.box}: {page.says}")
        return Cooler(made, load, tuple(codes))

    def _take(self, visit: str) -> list[str]:
        return self._left.pop(visit, [])

    def _count(self) -> Page:
        return self.browser.open(f"/kitchen/routes/{self.route}/count")


def _coolers(page: Page) -> set[str]:
    paths = [urlsplit(link.get("href", "")).path for link in page.links]
    return {path.rpartition("/")[2] for path in paths if path.startswith("/kitchen/coolers/")}
