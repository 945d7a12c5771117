"""The Desk's pages: rounds, lists, the figure, findings and bottles, without any script."""

import pytest

from fieldapp.domain import codes
from fieldapp.domain.codes import grouped
from fieldapp.domain.facts import BottleReceived, PersonListed
from fieldapp.projections import rounds
from tests.counter import Node
from tests.web.reader import Reader, words

ROUND = "/desk/rounds/spring"


@pytest.fixture
def busy(node: Node) -> Node:
    """One bottle resulted, one held, one with a result and never received."""
    node.record(
        PersonListed(person="coordinator-1", roles=("coordinator",), name="Imaginary Coordinator")
    )
    node.fill("Q-0401")
    node.accept("Q-0401", "26-1")
    node.report("Q-0401", "3.2")
    node.fill("Q-0402")
    node.record(BottleReceived(bottle=node.codes["Q-0402"], outcome="held", reason="cap loose"))
    node.report("Q-0403", "18")
    return node


@pytest.fixture
def desk(busy: Node) -> Reader:
    return Reader(busy, "coordinator-1")


def finding(node: Node) -> str:
    with node.pages() as pages:
        [row] = pages.findings(node.clock.at)
    return row["finding"]


def test_the_desk_opens_on_rounds_with_what_is_open(desk):
    page = words(desk.read("/desk/"))
    assert "Spring round" in page
    assert "1 open finding · 1 bottle to decide" in page
    assert "Lead: 3.2 µg/L (running, 2 of 3)" in page


def test_a_desk_without_rounds_says_how_one_comes(tmp_path):
    bare = Node(tmp_path / "bare")
    with bare.store.transaction():
        bare.store.put("places", "desk")
    page = Reader(bare, "").read("/desk/")
    assert "No round is here yet" in page
    bare.store.close()


def test_the_list_to_decide_says_of_each_bottle_why_it_waits(desk, busy):
    busy.deviate("Q-0402")
    page = words(desk.read(f"{ROUND}?show=undecided"))
    assert "cap loose The tap was flushed just before the stand (bends the result low)" in page


def test_what_was_not_analysed_stands_beside_the_answer_by_its_direction(desk, busy):
    busy.deviate("Q-0402")
    code = busy.codes["Q-0402"]
    desk.land(f"/desk/bottles/{code}", f"/desk/bottles/{code}/decide", analyse="no", reason="r")
    page = words(desk.read(ROUND))
    assert "Not analysed, as decided before any result: 1 that bends low." in page


@pytest.mark.parametrize("which", [*rounds.LISTS, "findings"])
def test_each_number_opens_its_list(desk, which):
    assert '<section id="list"' in desk.read(f"{ROUND}?show={which}")


def test_the_list_of_what_has_no_result_names_the_bottle(busy, desk):
    page = desk.read(f"{ROUND}?show=without-result")
    part = page.split('<section id="list"')[1].split("</section>")[0]
    assert grouped(busy.codes["Q-0402"]) in part
    assert grouped(busy.codes["Q-0401"]) not in part


def test_the_figure_says_value_unit_count_rank_rule_and_convention(desk):
    page = words(desk.read(ROUND))
    assert "90th percentile of lead running, 2 of 3 3.2 µg/L" in page
    assert "3.2 µg/L is not above the rule's limit of 15 µg/L." in page
    assert "n 1, rank 1," in page
    assert "Rule us-2020" in page
    assert "Convention: interpolate; no national convention." in page
    assert "safe" not in page.replace("Save", "").lower()


def test_what_did_not_enter_stands_with_its_reason_and_a_link(busy, desk):
    page = desk.read(ROUND)
    assert f'href="/story/{busy.codes["Q-0403"]}"' in page
    assert "its day of collection is not known yet" in page


def test_the_answer_says_when_the_rule_is_not_in_force(busy, desk):
    assert "not in force" not in desk.read(ROUND)
    with busy.pages() as pages:
        given = pages.story("round:spring")[0].fact
    changed = {**vars(given), "from_": "2028-05-01", "to": "2028-05-31"}
    busy.record(type(given)(**changed))
    page = desk.read(ROUND)
    assert "is not in force for all of this period" in page


@pytest.mark.parametrize(("sort", "first"), [("site", "Q-0401"), ("-site", "Q-0403")])
def test_the_table_sorts_by_plain_links(desk, sort, first):
    body = desk.read(f"{ROUND}?sort={sort}").split('id="visits"')[1].split("<tbody>")[1]
    assert words(body).startswith(first)


def test_the_table_is_filtered_by_a_plain_form(desk):
    body = desk.read(f"{ROUND}?filter=0402").split('id="visits"')[1].split("</section>")[0]
    assert "Q-0402" in body
    assert "Q-0401" not in body
    assert "No visit holds" in desk.read(f"{ROUND}?filter=nowhere")


def test_a_finding_is_a_sentence_with_its_evidence(busy, desk):
    page = words(desk.read(f"/desk/findings/{finding(busy)}"))
    assert f"Bottle {grouped(busy.codes['Q-0403'])} has a result and was never received." in page
    assert "Result: lead 18 µg/L Imaginary Clerk" in page


def test_a_settled_finding_shows_who_and_why_and_stays_listed(busy, desk):
    here = f"/desk/findings/{finding(busy)}"
    page = words(desk.land(here, f"{here}/settle", reason="the courier kept it"))
    assert "by Imaginary Coordinator" in page
    assert "the courier kept it" in page
    listed = desk.read(f"{ROUND}?show=findings")
    assert "No finding is open" in listed
    assert "never received" in listed


def test_settling_without_a_reason_is_refused_in_words(busy, desk):
    here = f"/desk/findings/{finding(busy)}"
    answer = desk.send(here, f"{here}/settle", reason="  ")
    assert answer.status_code == 422
    assert finding(busy)


def test_a_held_bottle_is_decided_with_a_reason(busy, desk):
    here = f"/desk/bottles/{busy.codes['Q-0402']}"
    page = words(desk.land(here, f"{here}/decide", analyse="no", reason="the cap was loose"))
    assert "Decided: do not analyse" in page
    assert busy.bottle("Q-0402")["decided"] == "leave"
    said = "Not analysed, as decided before any result: 1 without a known direction."
    assert said in words(desk.read(ROUND))


def test_after_a_result_no_decision_is_offered_or_taken(busy, desk):
    here = f"/desk/bottles/{busy.codes['Q-0402']}"
    fields = desk.hidden(here, f"{here}/decide")
    busy.report("Q-0402", "22")
    assert "can no longer be decided" in desk.read(here)
    answer = desk.client.post(
        f"{here}/decide", data={**fields, "analyse": "no", "reason": "too high"}
    )
    assert answer.status_code == 422
    assert busy.bottle("Q-0402")["decided"] == ""


def test_a_bottle_shows_every_entry_with_who_when_basis_and_hash(busy, desk):
    page = words(desk.read(f"/desk/bottles/{busy.codes['Q-0401']}"))
    for said in ("Code issued", "Filled at visit Q-0401, draw 1: to the line",
                 "Received: in, laboratory's number 26-1", "Result: copper 100 µg/L"):  # fmt: skip
        assert said in page
    with busy.pages() as pages:
        entry = pages.story(f"bottle:{busy.codes['Q-0401']}")[-1]
    assert entry.hash[:8] in page


def test_a_code_is_voided_where_it_holds_no_water(node):
    reader = Reader(node)
    here = f"/desk/bottles/{node.codes['Q-0403']}"
    page = words(reader.land(here, f"{here}/void", why="broken"))
    assert "Voided: broken" in page
    assert "This code will hold no water" not in page


def test_a_bottle_is_found_by_code_or_by_the_laboratory_s_number(busy, desk):
    for sought in (grouped(busy.codes["Q-0401"]).lower(), "26-1"):
        answer = desk.client.get("/desk/find", query_string={"code": sought})
        assert answer.location == f"/desk/bottles/{busy.codes['Q-0401']}"
    answer = desk.client.get("/desk/find", query_string={"code": "nothing"})
    assert answer.location == "/desk/"


@pytest.mark.parametrize(
    "path",
    ["/desk/rounds/autumn", "/desk/findings/0000000000000000", f"{ROUND}?show=gossip",
     f"/desk/bottles/{codes.new_code()}"],
)  # fmt: skip
def test_what_is_not_here_is_a_page_that_says_so(desk, path):
    answer = desk.client.get(path)
    assert answer.status_code == 404
    assert "<h1" in answer.get_data(as_text=True)


@pytest.mark.parametrize(
    ("part", "bad"),
    [("decide", {"analyse": "perhaps", "reason": "x"}), ("decide", {"reason": "x"}),
     ("decide", {"analyse": "no", "reason": "x" * 2001}), ("void", {"why": "tired"}), ("void", {})],
)  # fmt: skip
def test_bad_fields_at_the_desk_record_nothing(busy, desk, part, bad):
    here = f"/desk/bottles/{busy.codes['Q-0402']}"
    before = busy.bottle("Q-0402")
    fields = {**desk.hidden(here, f"{here}/decide"), **bad}
    assert desk.client.post(f"{here}/{part}", data=fields).status_code == 422
    assert busy.bottle("Q-0402") == before


def test_no_page_of_the_desk_shows_a_resident_s_name(busy, desk):
    for path in ("/desk/", ROUND, f"/desk/bottles/{busy.codes['Q-0401']}"):
        assert "Imaginary Resident" not in desk.read(path)
