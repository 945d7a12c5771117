"""A reader of pages: opens one, sends its form with the hidden fields, as a browser would."""

import re
from html import unescape
from typing import Any

from flask.testing import FlaskClient
from werkzeug.test import TestResponse

from fieldapp.web import create_app
from tests.counter import Node

_HIDDEN = re.compile(r'<input type="hidden" name="(?P<name>\w+)" value="(?P<value>[^"]*)">')


class Reader:
    """One person at one browser."""

    def __init__(self, node: Node, person: str = "clerk-1") -> None:
        with node.store.transaction():
            node.store.put("places", "kitchen bench desk")
        self.client: FlaskClient = create_app(node.store).test_client()
        if person:
            self.send("/", "/person", person=person)

    def read(self, path: str, **headers: str) -> str:
        """Return the text of a page that is there."""
        answer = self.client.get(path, headers=headers)
        assert answer.status_code == 200, answer.get_data(as_text=True)
        return answer.get_data(as_text=True)

    def hidden(self, page: str, action: str) -> dict[str, str]:
        """Return the hidden fields of the form that goes to ``action``."""
        return hidden_in(self.read(page), action)

    def go_on(self, shown: str, action: str, **fields: Any) -> str:
        """Send the form of a page already read and return the page that it leads to."""
        answer = self.client.post(action, data={**hidden_in(shown, action), **fields})
        assert answer.status_code == 303, answer.get_data(as_text=True)
        return self.read(answer.location)

    def send(self, page: str, action: str, **fields: Any) -> TestResponse:
        """Open the page and send its form with those fields."""
        return self.client.post(action, data={**self.hidden(page, action), **fields})

    def land(self, page: str, action: str, **fields: Any) -> str:
        """Send the form and return the page that it leads to."""
        answer = self.send(page, action, **fields)
        assert answer.status_code == 303, answer.get_data(as_text=True)
        return self.read(answer.location)


def hidden_in(shown: str, action: str) -> dict[str, str]:
    """Return the hidden fields of the form of that page that goes to ``action``."""
    form = next(part for part in shown.split("<form")[1:] if f'action="{action}"' in part)
    found = _HIDDEN.finditer(form.split("</form>")[0])
    return {one["name"]: unescape(one["value"]) for one in found}


def words(page: str) -> str:
    """Return the words of a page as a person reads them."""
    return " ".join(unescape(re.sub(r"<[^>]+>", " ", page)).split())
