"""Walk one visit in the Kitchen: at each page the form of the way on, filled by the script."""

from collections import deque
from collections.abc import Collection, Mapping
from datetime import UTC, datetime
from urllib.parse import urlsplit

from fieldapp.rehearsal.browser import Browser, Form, Page, Trouble
from fieldapp.rehearsal.day import Photo, VisitScript
from fieldapp.rehearsal.nodes import Time
from fieldapp.rehearsal.picture import picture_of

MOST_PAGES = 80
WATER_LOT = "LW-0001"


class Visit:
    """One visit as the script tells it; ``codes`` holds the bottle taken for each labelled draw.

    ``carried`` names the draws whose bottles leave the house with water in them. ``strange`` are
    codes that were printed for another visit; they are filled here all the same.
    """

    def __init__(
        self,
        browser: Browser,
        time: Time,
        visit: str,
        script: VisitScript,
        codes: Mapping[int, str],
        signer: str,
        strange: Collection[str] = (),
    ) -> None:
        self.browser, self.time, self.visit, self.script = browser, time, visit, script
        self.codes, self.signer, self.strange = dict(codes), signer, frozenset(strange)
        self._photos = deque(script.photos)
        self._unset, self._drawn = sorted(codes), 1
        self.carried: list[int] = []
        self.arrived = time.now()

    @property
    def path(self) -> str:
        """Return where the visit's present step is."""
        return f"/kitchen/visits/{self.visit}"

    def walk(self) -> datetime | None:
        """Walk until the visit is over; of a visit left to wait, return when to come back."""
        page = self.browser.open(self.path)
        for _ in range(MOST_PAGES):
            form = page.main()
            if form is not None:
                page = self._fill(page, form)
                continue
            until = _until(page)
            if until is None:
                return None  # nothing to press and nothing to wait for: the visit is over
            if self.script.waits == "not" and self._unset:
                page = self._as_it_happened(page)
                continue
            if self.script.waits == "away" and not _stays(page):
                self.browser.press(page, page.form("/leave"))
                return until
            self.time.until(until)
            page = self.browser.open(self.path)
        raise Trouble(f"The visit {self.visit} does not come to an end: {page.says}")

    def _fill(self, page: Page, form: Form) -> Page:
        ending = urlsplit(form.action).path.rpartition("/")[2]
        if ending == "sign" and self._photos:
            self._photograph(self._photos.popleft())
            return self.browser.open(self.path)
        filled = {
            "answer": self._answer,
            "last-use": self._last_use,
            "set": self._set,
            "fill": self._full,
            "blank": self._blank,
            "sign": self._sign,
        }
        given = filled[ending](form) if ending in filled else {}
        if given.get("code") in self.strange:
            return self._as_it_happened(self.browser.press(page, form, given, barred=True))
        return self.browser.press(page, form, given)

    def _as_it_happened(self, page: Page) -> Page:
        """Take the way beside a bar: what is due is done already (R1).

        Beside a wait all labelled draws are told, beside a strange bottle the one it was set for.
        """
        page = self.browser.open(page.link("/done"))
        form = page.form("/done")
        told = [self._drawn] if self.codes.get(self._drawn) in self.strange else self._take_all()
        given = {name: "" for name in form.fields if name.startswith("was_")}
        for draw in told:
            given |= {f"was_{draw}": "yes", f"code_{draw}": self.codes[draw]}
            given[f"fill_{draw}"] = self.script.fill_of(draw)
        self.carried += told
        return self.browser.press(page, form, given)

    def _take_all(self) -> list[int]:
        taken, self._unset = self._unset, []
        return taken

    def _photograph(self, photo: Photo) -> None:
        page = self.browser.open(f"{self.path}/photos")
        about = f"bottle:{self.codes[photo.draw]}" if photo.draw else f"visit:{self.visit}"
        picture = picture_of(f"{self.visit} {photo.draw} {photo.says}")
        given = {"about": about, "caption": photo.says}
        self.browser.press(page, page.form("/photos"), given, files={"photo": picture})

    def _full(self, form: Form) -> dict[str, str]:
        """Say how full each bottle is, as scripted."""
        runs = [name for name in form.choices if name.startswith("fill_")]
        if runs:
            draws = [int(name[5:]) for name in runs]
            self.carried += [draw for draw in draws if draw in self.codes]
            return {f"fill_{draw}": self.script.fill_of(draw) for draw in draws}
        self.carried.append(self._drawn)
        return {"fill": self.script.fill_of(self._drawn)}

    def _answer(self, form: Form) -> dict[str, str]:
        """Answer as scripted, else as expected: that is the first answer offered."""
        question = form.fields["question"]
        return {"answer": self.script.answers.get(question, form.values("answer")[0])}

    def _last_use(self, form: Form) -> dict[str, str]:
        if form.fields.get("said") == "yes":
            return {}
        use = self.script.last_use
        given = {"exact": use.exact, "where": self._place(form, use.where)}
        moments = use.moments(self.arrived, self.time.zone)
        if moments is not None:
            given["at"] = moments[0].isoformat()
            if use.exact == "between":
                given["to"] = moments[1].isoformat()
        return given

    @staticmethod
    def _place(form: Form, where: str) -> str:
        wanted = where.replace(" ", "-")
        return wanted if wanted in form.choices.get("where", []) else "elsewhere"

    def _set(self, form: Form) -> dict[str, str]:
        if not self._unset:
            raise Trouble(f"{self.visit} asks for a bottle beyond those that have a label")
        self._drawn = self._unset.pop(0)
        return {"code": self.codes[self._drawn]}

    def _blank(self, form: Form) -> dict[str, str]:
        given = {"water_lot": WATER_LOT}
        if "code" in form.fields:
            self._drawn = self._unset.pop(0)
            given["code"] = self.codes[self._drawn]
        self.carried.append(self._drawn)
        return given

    def _sign(self, form: Form) -> dict[str, str]:
        pressed = {b["name"]: b.get("value", "") for b in form.buttons if b.get("name")}
        return {"name": self.signer, **pressed}


def _stays(page: Page) -> bool:
    """Say whether nobody leaves now: the tap runs."""
    link = page.main_link()
    return link is not None and "data-stay" in link


def _until(page: Page) -> datetime | None:
    link = page.main_link()
    if link is None or not link.get("data-until"):
        return None
    return datetime.fromisoformat(link["data-until"]).astimezone(UTC)
