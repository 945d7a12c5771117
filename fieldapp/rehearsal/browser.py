"""A browser of the standard library: opens a page, reads its forms, fills and posts them.

It sees what a person with no scripts sees. A form it must press carries ``data-main``.
"""

import secrets
from dataclasses import dataclass, field
from html.parser import HTMLParser
from http.cookiejar import CookieJar, DefaultCookiePolicy
from urllib import error, parse, request

URLENCODED = "application/x-www-form-urlencoded"
FAULTY, BARRED = 400, 422


class Trouble(Exception):
    """A page that answered with an error, or without what the walker needs on it."""


@dataclass
class Form:
    """One form: where it goes, its hidden and typed fields, its choices and buttons."""

    action: str
    method: str
    attributes: dict[str, str]
    fields: dict[str, str] = field(default_factory=dict)
    choices: dict[str, list[str]] = field(default_factory=dict)
    buttons: list[dict[str, str]] = field(default_factory=list)
    typed: list[str] = field(default_factory=list)
    files: list[str] = field(default_factory=list)

    def values(self, name: str) -> list[str]:
        """Return the values that name may take, by choice or by button."""
        pressed = [b.get("value", "") for b in self.buttons if b.get("name") == name]
        return [*self.choices.get(name, []), *pressed]


@dataclass
class Page:
    """A page as it was answered.

    ``says`` is its heading and what it warns of. Only that is told where the walker is in
    trouble: the rest may hold a resident's name and address (R6).
    """

    url: str
    code: int
    forms: list[Form]
    links: list[dict[str, str]]
    marks: dict[str, str]
    says: str

    def main(self) -> Form | None:
        """Return the form of the way on; nothing where the way on is to wait or to go."""
        found = [form for form in self.forms if "data-main" in form.attributes]
        if len(found) > 1:
            raise Trouble(f"{self.url} has {len(found)} forms for the way on: {self.says}")
        return found[0] if found else None

    def main_link(self) -> dict[str, str] | None:
        """Return the link of the way on, which may carry the end of a wait (``data-until``)."""
        return next((link for link in self.links if "data-main" in link), None)

    def form(self, ending: str, **holding: str) -> Form:
        """Return the form that posts to an address with that ending, holding those values."""
        for form in self.forms:
            held = holding.items() <= form.fields.items()
            if held and parse.urlsplit(form.action).path.endswith(ending):
                return form
        raise Trouble(f"{self.url} has no form for {ending}: {self.says}")

    def link(self, ending: str) -> str:
        """Return the address of the link whose path has that ending."""
        for link in self.links:
            if parse.urlsplit(link.get("href", "")).path.endswith(ending):
                return link["href"]
        raise Trouble(f"{self.url} has no link to {ending}: {self.says}")


class Browser:
    """One person's browser at one node."""

    def __init__(self, root: str) -> None:
        self.root = root.rstrip("/")
        jar = CookieJar(policy=DefaultCookiePolicy(allowed_domains=["127.0.0.1"]))
        self._opener = request.build_opener(
            request.HTTPCookieProcessor(jar), request.ProxyHandler({})
        )
        self.presses = 0

    def open(self, path: str) -> Page:
        """Open a page by its path or address."""
        page = self._ask(parse.urljoin(self.root + "/", path), None)
        if page.code >= FAULTY:
            raise Trouble(f"{page.url} answered {page.code}: {page.says}")
        return page

    def press(
        self,
        page: Page,
        form: Form,
        given: dict[str, str] | None = None,
        *,
        files: dict[str, bytes] | None = None,
        barred: bool = False,
    ) -> Page:
        """Fill the form as given, everything else as it stands, and post it.

        ``files`` are pictures by the name of their field. ``barred``: the answer is to be the
        page that says what stands against it.
        """
        sent = {**form.fields, **(given or {})}
        self.presses += 1
        kind, data = URLENCODED, parse.urlencode(sent).encode()
        if files:
            kind, data = in_parts(sent, files)
        answer = self._ask(parse.urljoin(page.url, form.action), data, kind)
        if barred != (answer.code == BARRED) or (answer.code >= FAULTY and not barred):
            raise Trouble(f"{answer.url} answered {answer.code}: {answer.says}")
        return answer

    def _ask(self, url: str, data: bytes | None, kind: str = "") -> Page:
        """Return the page at an address, whatever its code."""
        asked = request.Request(url, data=data, headers={"Content-Type": kind} if kind else {})
        try:
            with self._opener.open(asked, timeout=30) as answer:
                return read_page(answer.geturl(), answer.status, answer.read().decode())
        except error.HTTPError as fault:
            return read_page(url, fault.code, fault.read().decode("utf-8", "replace"))
        except OSError as fault:
            raise Trouble(f"{url} does not answer: {fault}") from fault


def in_parts(sent: dict[str, str], files: dict[str, bytes]) -> tuple[str, bytes]:
    """Return fields and pictures as one body of parts, with its media type.

    Source: RFC 7578, multipart/form-data.
    """
    mark = secrets.token_hex(16)
    body = b""
    for name, value in sent.items():
        body += f'--{mark}\r\nContent-Disposition: form-data; name="{name}"\r\n\r\n'.encode()
        body += value.encode() + b"\r\n"
    for name, data in files.items():
        told = f'name="{name}"; filename="{name}.jpg"\r\nContent-Type: image/jpeg'
        body += f"--{mark}\r\nContent-Disposition: form-data; {told}\r\n\r\n".encode()
        body += data + b"\r\n"
    return f"multipart/form-data; boundary={mark}", body + f"--{mark}--\r\n".encode()


def read_page(url: str, code: int, html: str) -> Page:
    """Return a page's forms, links and marks (``data-*`` anywhere in its main part)."""
    reader = _Reader()
    reader.feed(html)
    return Page(url, code, reader.forms, reader.links, reader.marks, " ".join(reader.loud))


class _Reader(HTMLParser):
    def __init__(self) -> None:
        super().__init__()
        self.forms: list[Form] = []
        self.links: list[dict[str, str]] = []
        self.marks: dict[str, str] = {}
        self.loud: list[str] = []
        self._within = ""
        self._form: Form | None = None
        self._select = ""
        self._quiet = 0

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        given = {name: value or "" for name, value in attrs}
        self.marks.update({n: v for n, v in given.items() if n.startswith("data-mark")})
        if tag in ("script", "style", "svg", "head"):
            self._quiet += 1
        if tag == "h1" or (tag == "p" and _warns(given)):
            self._within = tag
        if tag == "form":
            self._form = Form(given.get("action", ""), given.get("method", "get"), given)
            self.forms.append(self._form)
        elif tag == "a":
            self.links.append(given)
        elif (form := self._form_of(given)) is not None:
            self._take(form, tag, given)

    def _form_of(self, given: dict[str, str]) -> Form | None:
        """Return the form a control belongs to: the one it names, else the one around it."""
        if named := given.get("form"):
            return next((f for f in self.forms if f.attributes.get("id") == named), None)
        return self._form

    def _take(self, form: Form, tag: str, given: dict[str, str]) -> None:
        name = given.get("name", "")
        if tag == "select":
            self._select = name
        elif tag == "option" and self._select:
            form.choices.setdefault(self._select, []).append(given.get("value", ""))
            if "selected" in given or self._select not in form.fields:
                form.fields[self._select] = given.get("value", "")
        elif tag == "button":
            form.buttons.append(given)
        elif tag == "textarea" and name:
            form.fields.setdefault(name, "")
        elif tag == "input" and name:
            self._take_input(form, name, given)

    @staticmethod
    def _take_input(form: Form, name: str, given: dict[str, str]) -> None:
        kind = given.get("type", "text")
        if kind in ("radio", "checkbox"):
            form.choices.setdefault(name, []).append(given.get("value", "on"))
            if "checked" in given:
                form.fields[name] = given.get("value", "on")
        elif kind in ("submit", "image"):
            form.buttons.append(given)
        elif kind == "file":
            form.files.append(name)
        else:
            form.fields[name] = given.get("value", "")
            if kind != "hidden":
                form.typed.append(name)

    def handle_endtag(self, tag: str) -> None:
        if tag == self._within:
            self._within = ""
        if tag == "form":
            self._form = None
        elif tag == "select":
            self._select = ""
        elif tag in ("script", "style", "svg", "head"):
            self._quiet -= 1

    def handle_data(self, data: str) -> None:
        if self._within and not self._quiet and data.strip():
            self.loud.append(data.strip())


def _warns(given: dict[str, str]) -> bool:
    told = given.get("role") == "alert" or "says" in given.get("class", "").split()
    return told and "hidden" not in given
