"""What another site's page, another name or a mere look can do to a node: nothing."""

import re
from urllib.parse import urlsplit

import pytest

from fieldapp.web import create_app
from fieldapp.web.replication import create_door
from tests import nodes
from tests.web.visitor import TOKEN, a_visitor, endpoints, rule_of

MACHINES = ("replication.door", "work.hand_in")
"""Called by programs, signed or with the folder's token; they carry no form."""


FORMS = [name for name in endpoints("POST") if name not in MACHINES]
LOOKS = endpoints("GET")


@pytest.fixture(scope="module")
def visitor(tmp_path_factory):
    """Give a browser at a node that holds the shipped plan; what is refused leaves it as it is."""
    with a_visitor(tmp_path_factory.mktemp("guarded")) as made:
        yield made


FOREIGN = {
    "a page of another site": ({"Origin": "https://elsewhere.example"}, 403),
    "a page without an origin of its own": ({"Origin": "null"}, 403),
    "another port of this machine": ({"Origin": "http://localhost:1"}, 403),
    "a browser that says so itself": ({"Sec-Fetch-Site": "cross-site"}, 403),
    "a page of a sister name": ({"Sec-Fetch-Site": "same-site"}, 403),
    "a name that was bent to this machine": ({"Host": "evil.example"}, 400),
}


@pytest.mark.parametrize("endpoint", FORMS)
@pytest.mark.parametrize("whose", FOREIGN)
def test_a_form_of_another_is_refused_and_nothing_recorded(visitor, endpoint, whose):
    headers, code = FOREIGN[whose]
    before = nodes.everything(visitor.store)
    path = visitor.path(rule_of(visitor, endpoint, "POST"))
    answer = visitor.send(path, headers=headers)
    assert answer.status_code == code
    assert nodes.everything(visitor.store) == before


@pytest.mark.parametrize("endpoint", FORMS)
@pytest.mark.parametrize("token", [None, "", "guessed"])
def test_a_form_without_its_token_is_refused_and_nothing_recorded(visitor, endpoint, token):
    before = nodes.everything(visitor.store)
    path = visitor.path(rule_of(visitor, endpoint, "POST"))
    answer = visitor.send(path, token=token)
    assert answer.status_code == 400
    assert "Open it again" in answer.text
    assert nodes.everything(visitor.store) == before


def test_another_browsers_token_is_refused(visitor):
    other = visitor.app.test_client()
    other.get("/")
    answer = other.post("/person", data={"token": visitor.token, "person": "sampler-1"})
    assert answer.status_code == 400


def test_an_ordinary_form_of_this_machine_is_taken(visitor):
    # The control: without it every refusal above could be one of everything.
    before = nodes.count(visitor.store)
    answer = visitor.send(
        "/kitchen/visits/V-0402/open",
        headers={"Origin": "http://localhost", "Sec-Fetch-Site": "same-origin"},
    )
    assert answer.status_code == 303
    assert nodes.count(visitor.store) == before + 1


@pytest.mark.parametrize("endpoint", LOOKS)
def test_a_look_writes_nothing(visitor, endpoint):
    before = nodes.everything(visitor.store)
    written = visitor.store._db.total_changes
    rule = rule_of(visitor, endpoint, "GET")
    assert visitor.get(visitor.path(rule)).status_code in (200, 303, 404)
    visitor.client.head(visitor.path(rule)).close()
    assert visitor.store._db.total_changes == written
    assert nodes.everything(visitor.store) == before


@pytest.mark.parametrize("endpoint", LOOKS)
def test_a_page_runs_nothing_but_what_this_node_serves(visitor, endpoint):
    answer = visitor.get(visitor.path(rule_of(visitor, endpoint, "GET")))
    policy = answer.headers["Content-Security-Policy"]
    assert "default-src 'self'" in policy
    assert "frame-ancestors 'none'" in policy
    assert "unsafe" not in policy
    assert answer.headers["X-Content-Type-Options"] == "nosniff"
    if "html" in answer.content_type:
        assert re.findall(r"<script(?![^>]*\bsrc=)", answer.text) == []
        assert re.findall(r"<style|\sstyle=|\son[a-z]+=|javascript:", answer.text) == []
        assert answer.headers["Cache-Control"] == "no-store"


@pytest.mark.parametrize("endpoint", LOOKS)
def test_a_page_is_not_opened_under_another_name(visitor, endpoint):
    path = visitor.path(rule_of(visitor, endpoint, "GET"))
    assert visitor.get(path, Host="evil.example").status_code == 400


def test_the_cookie_is_this_installs_own_and_out_of_reach_of_scripts(visitor):
    client = visitor.app.test_client()
    given = client.get("/").headers["Set-Cookie"]
    assert given.startswith(f"{visitor.store.identity.cookie}=")
    assert "HttpOnly" in given
    assert "SameSite=Strict" in given


def test_work_is_taken_only_from_who_can_read_the_folder(visitor):
    before = nodes.everything(visitor.store)
    for sent in (None, "", "Bearer ", "Bearer guessed", TOKEN[:-1]):
        headers = {} if sent is None else {"Authorization": sent}
        answer = visitor.client.post("/work/labels", json={"route": "R-0504"}, headers=headers)
        assert answer.status_code == 403, sent
    assert nodes.everything(visitor.store) == before


def test_a_node_without_a_token_takes_no_work_at_all(planned):
    client = create_app(planned).test_client()
    answer = client.post("/work/labels", json={}, headers={"Authorization": "Bearer "})
    assert answer.status_code == 403


def test_work_from_another_machine_is_refused(visitor):
    answer = visitor.client.post(
        "/work/labels", json={"route": "R-0504"}, headers={"Authorization": f"Bearer {TOKEN}"},
        environ_base={"REMOTE_ADDR": "192.0.2.7"},
    )  # fmt: skip
    assert answer.status_code == 403


def test_the_door_of_a_node_that_is_no_central_is_shut(visitor):
    assert visitor.client.post("/sync/v1/session", data=b"x").status_code == 404


def test_the_pages_are_not_at_the_door_that_others_reach(planned):
    client = create_door(planned).test_client()
    for path in ("/", "/kitchen/", "/bench/", "/desk/", "/state", "/work/labels"):
        assert client.get(path).status_code == 404, path


def test_a_page_that_leads_on_leads_nowhere_outside(visitor):
    for then in ("https://elsewhere.example/", "//elsewhere.example", "javascript:alert(1)",
                 "/\\elsewhere.example", "\\\\elsewhere.example"):  # fmt: skip
        answer = visitor.send("/person", person="sampler-1", then=then)
        assert answer.status_code == 303
        assert urlsplit(answer.location).netloc == "", then
        assert re.match(r"/[^/\\\\]", answer.location), then
