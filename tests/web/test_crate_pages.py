"""The crate's pages as plain forms: count, pack, seal, open again, hand over, receive on paper."""

import io

import pytest

from fieldapp.domain.codes import grouped
from fieldapp.domain.facts import CoolerOpened, PersonListed
from fieldapp.projections import crates
from tests.counter import Node
from tests.web.reader import Reader, words

BOARD, COUNT = "/kitchen/routes/north", "/kitchen/routes/north/count"
PACK, LOCATE = "/kitchen/routes/north/pack", "/kitchen/routes/north/locate"


@pytest.fixture
def filled(node: Node) -> Node:
    node.record(PersonListed(person="sampler-1", roles=("sampler",), name="Imaginary Sampler"))
    for visit in ("Q-0401", "Q-0402", "Q-0403"):
        node.fill(visit)
    return node


@pytest.fixture
def sampler(filled: Node) -> Reader:
    return Reader(filled, "sampler-1")


def the_cooler(node: Node) -> str:
    with node.pages() as pages:
        (row,) = crates.coolers(pages)
    return f"/kitchen/coolers/{row['cooler']}"


def pack_all(sampler: Reader) -> str:
    return sampler.land(COUNT, PACK, all="yes", box="3")


def seal_all(node: Node, sampler: Reader, seal: str = "88 214") -> str:
    pack_all(sampler)
    return sampler.land(COUNT, the_cooler(node) + "/seal", seal_1=seal, count="3")


def test_an_empty_route_says_that_nothing_is_filled(node):
    page = words(Reader(node).read(COUNT))
    assert "0 of 0 in" in page
    assert "No bottle of this route is filled yet" in page


def test_the_count_names_every_filled_bottle_that_is_in_no_cooler(filled, sampler):
    page = words(sampler.read(COUNT))
    assert "0 of 3 in" in page
    for code in filled.codes.values():
        assert grouped(code) in page
    assert "where?" in page
    assert "All 3 bottles are in" in page


def test_one_press_packs_all_and_then_the_seal_is_due(sampler):
    page = words(pack_all(sampler))
    assert "Seal 3 bottles in Cooler 3, Tuesday" in page
    assert "Close Cooler 3, Tuesday" in page


def test_a_scan_packs_one_and_the_count_goes_up(filled, sampler):
    page = words(sampler.land(COUNT, PACK, box="3", code=filled.codes["Q-0402"]))
    assert "1 of 3 in" in page
    assert "All 2 bottles are in" in page


def test_the_board_says_what_is_due_of_the_crate(filled, sampler):
    assert "Pack the crate · 3 bottles" in words(sampler.read(BOARD))
    pack_all(sampler)
    assert "Close cooler 3 · 3 bottles" in words(sampler.read(BOARD))
    sampler.land(COUNT, the_cooler(filled) + "/seal", seal_1="88 214", count="3")
    assert "Hand over cooler 3 · 3 bottles" in words(sampler.read(BOARD))
    sampler.land(COUNT, the_cooler(filled) + "/relinquish", to="night-box")
    assert "All stops are done and no bottle is in the crate" in words(sampler.read(BOARD))


def test_a_loose_bottle_bars_the_seal_with_three_ways(filled, sampler):
    sampler.land(COUNT, PACK, box="3", code=filled.codes["Q-0401"])
    sampler.land(COUNT, PACK, box="3", code=filled.codes["Q-0402"])
    form = sampler.hidden(COUNT, PACK)
    answer = sampler.client.post(
        the_cooler(filled) + "/seal", data={**form, "seal_1": "88 214", "count": "2"}
    )
    page = answer.get_data(as_text=True)
    assert answer.status_code == 422
    assert f"In no cooler: {grouped(filled.codes['Q-0403'])}." in words(page)
    assert "It is sealed already" in words(page)
    assert 'name="already" value="yes"' in page
    assert 'name="seal_1" value="88 214"' in page
    with filled.pages() as pages:
        assert pages.count("SELECT COUNT(*) FROM p_fact WHERE kind = 'cooler.sealed'") == 0


def test_what_is_done_already_is_recorded_beside_the_bar(filled, sampler):
    sampler.land(COUNT, PACK, box="3", code=filled.codes["Q-0401"])
    form = sampler.hidden(COUNT, PACK)
    sealing = {"seal_1": "88 214", "count": "1", "already": "yes"}
    answer = sampler.client.post(the_cooler(filled) + "/seal", data={**form, **sealing})
    assert answer.status_code == 303
    with filled.pages() as pages:
        assert crates.coolers(pages)[0]["state"] == "sealed"


def test_saying_where_a_bottle_is_lets_the_seal_on(filled, sampler):
    sampler.land(COUNT, PACK, box="3", code=filled.codes["Q-0401"])
    sampler.land(COUNT, PACK, box="3", code=filled.codes["Q-0402"])
    page = sampler.land(
        COUNT, LOCATE, bottle=filled.codes["Q-0403"], how="left-behind", where="on the sill"
    )
    assert "Seal 2 bottles in" in words(page)
    assert "Left behind" in words(page)
    page = sampler.land(COUNT, the_cooler(filled) + "/seal", seal_1="88 214", count="2")
    assert "Hand over Cooler 3, Tuesday: 2 bottles, seal 88 214" in words(page)


def test_what_is_kept_for_the_next_cooler_is_packed_after_the_seal(filled, sampler):
    sampler.land(COUNT, PACK, box="3", code=filled.codes["Q-0401"])
    for visit in ("Q-0402", "Q-0403"):
        sampler.land(COUNT, LOCATE, bottle=filled.codes[visit], how="with-me")
    page = sampler.land(COUNT, the_cooler(filled) + "/seal", seal_1="88 214", count="1")
    assert "All 2 bottles are in" in words(page)
    page = sampler.land(COUNT, PACK, all="yes", box="4")
    assert "Seal 2 bottles in Cooler 4, Tuesday" in words(page)


def test_the_last_press_is_taken_back(filled, sampler):
    pack_all(sampler)
    page = sampler.land(COUNT, f"{BOARD}/take-back")
    assert "0 of 3 in" in words(page)


def test_a_double_post_records_once(filled, sampler):
    fields = {**sampler.hidden(COUNT, PACK), "all": "yes", "box": "3"}
    first, second = (sampler.client.post(PACK, data=fields) for _ in range(2))
    assert (first.status_code, second.status_code) == (303, 303)
    with filled.pages() as pages:
        assert pages.count("SELECT COUNT(*) FROM p_fact WHERE kind = 'bottle.packed'") == 3


def test_an_old_page_of_a_seal_says_that_it_is_on(filled, sampler):
    pack_all(sampler)
    cooler = the_cooler(filled)
    old = {**sampler.hidden(COUNT, cooler + "/seal"), "seal_1": "88 215", "count": "3"}
    sampler.land(COUNT, cooler + "/seal", seal_1="88 214", count="3")
    answer = sampler.client.post(cooler + "/seal", data=old, follow_redirects=True)
    assert "recorded already" in words(answer.get_data(as_text=True))
    with filled.pages() as pages:
        assert crates.coolers(pages)[0]["seals"] == ["88 214"]


def test_a_cooler_is_opened_again_with_a_reason_and_a_new_number(filled, sampler):
    seal_all(filled, sampler)
    cooler = the_cooler(filled)
    page = words(sampler.read(cooler))
    assert "3 bottles, seal 88 214" in page
    refused = sampler.send(cooler, cooler + "/reopen", reason=" ", seal_1="88 219")
    assert refused.status_code == 422
    assert "why the seal was broken" in words(refused.get_data(as_text=True))
    page = sampler.land(cooler, cooler + "/reopen", reason="one more", seal_1="88 219")
    assert "seal 88 219" in words(page)
    assert '<span class="struck">88 214</span>' in sampler.read(cooler)


def test_a_courier_takes_it_with_his_waybill(filled, sampler):
    seal_all(filled, sampler)
    cooler = the_cooler(filled)
    refused = sampler.send(COUNT, cooler + "/relinquish", to="courier")
    assert "waybill" in words(refused.get_data(as_text=True))
    sampler.land(COUNT, cooler + "/relinquish", to="courier", waybill="WB-7", name="N. Carrier")
    assert "Handed over to a courier 06:00 , waybill WB-7" in words(sampler.read(cooler))


def test_a_door_is_counted_on_the_board(filled, sampler):
    action = "/kitchen/visits/Q-0401/crate"
    assert "Q-0401: 1 bottle in the crate?" in words(sampler.read(BOARD))
    page = words(sampler.land(BOARD, action, count="1"))
    assert "Q-0401: 1 bottle in the crate?" not in page
    assert "Q-0402: 1 bottle in the crate?" in page


def test_what_nobody_knows_is_not_found(sampler):
    for path in ("/kitchen/routes/nowhere/count", "/kitchen/coolers/C-NONE00"):
        assert sampler.client.get(path).status_code == 404


# the Desk


@pytest.fixture
def on_the_road(filled: Node, sampler: Reader) -> str:
    seal_all(filled, sampler)
    sampler.land(COUNT, the_cooler(filled) + "/relinquish", to="courier", waybill="WB-7")
    return the_cooler(filled).replace("/kitchen", "/desk")


@pytest.fixture
def clerk(filled: Node) -> Reader:
    return Reader(filled)


def test_the_desk_lists_the_coolers_of_a_round(on_the_road, clerk):
    page = words(clerk.read("/desk/rounds/spring/coolers"))
    assert "Cooler 3, Tuesday 3 88 214 handed over" in page
    assert "/desk/rounds/spring/coolers" in clerk.read("/desk/rounds/spring")


def state(clerk: Reader, cooler: str, codes: dict[str, str], **fields):
    sent = {**clerk.hidden(cooler, cooler + "/receipt"), "on": "2027-05-04", "name": "Q. Receiver"}
    for code, number in codes.items():
        sent |= {f"came_{code}": "yes", f"number_{code}": number}
    return clerk.client.post(
        cooler + "/receipt", data={**sent, **fields}, content_type="multipart/form-data"
    )


def test_a_receipt_on_paper_is_stated_with_its_sheet_and_shown(filled, on_the_road, clerk):
    numbers = {code: f"L-{n}" for n, code in enumerate(filled.codes.values(), start=1)}
    sheet = (io.BytesIO(b"%PDF-1.4 signed"), "sheet.pdf")
    assert state(clerk, on_the_road, numbers, sheet=sheet).status_code == 303
    page = words(clerk.read(on_the_road))
    assert "On Tue 4 May 2027, signed by Q. Receiver." in page
    assert "in, stated L-1" in page
    with clerk.client.get(on_the_road + "/sheet") as answer:
        assert answer.data == b"%PDF-1.4 signed"
    with filled.pages() as pages:
        assert [b["outcome"] for b in pages.bottles(round_id="spring")] == ["accepted"] * 3
        assert pages.findings(filled.clock.at) == []


def test_a_bottle_without_a_mark_did_not_come(filled, on_the_road, clerk):
    state(clerk, on_the_road, {filled.codes["Q-0401"]: "", filled.codes["Q-0402"]: ""})
    with filled.pages() as pages:
        (found,) = pages.findings(filled.clock.at)
    assert found["about"] == f"bottle:{filled.codes['Q-0403']}"
    page = words(clerk.read("/desk/rounds/spring?show=findings"))
    assert "It was packed into a cooler." in page


def test_a_sheet_that_is_no_document_is_refused_and_nothing_recorded(filled, on_the_road, clerk):
    sheet = (io.BytesIO(b"nonsense"), "sheet.pdf")
    answer = state(clerk, on_the_road, {filled.codes["Q-0401"]: ""}, sheet=sheet)
    assert answer.status_code == 422
    assert "Received by the laboratory, as stated" not in clerk.read(on_the_road)


def test_a_stated_receipt_is_taken_back(filled, on_the_road, clerk):
    state(clerk, on_the_road, {filled.codes["Q-0401"]: ""})
    clerk.land(on_the_road, on_the_road + "/take-back")
    assert "Received by a laboratory on paper" in words(clerk.read(on_the_road))


def test_a_cooler_that_no_paper_came_for_has_no_sheet(on_the_road, clerk):
    assert clerk.client.get(on_the_road + "/sheet").status_code == 404


def test_the_record_for_the_lid_is_a_pdf(on_the_road, clerk):
    answer = clerk.client.get(on_the_road + "/record.pdf")
    assert answer.mimetype == "application/pdf"
    assert answer.data.startswith(b"%PDF")


def test_a_finding_of_a_cooler_is_said_with_box_and_day_and_leads_to_it(filled, on_the_road, clerk):
    cooler = on_the_road.rpartition("/")[2]
    filled.record(CoolerOpened(cooler=cooler, seal_read=("88 216",), whole=True, count=3))
    page = clerk.read("/desk/rounds/spring?show=findings")
    said = "Cooler 3, Tue 4 May: the seals put on were 88 214; the laboratory read 88 216, whole."
    assert said in words(page)
    assert f'href="{on_the_road}"' in page
    assert said in words(clerk.read(on_the_road))


def test_a_short_count_says_which_bottles_to_look_for_and_asks_again(filled, sampler):
    page = words(sampler.land(BOARD, "/kitchen/visits/Q-0401/crate", count="0"))
    assert "Counted into the crate: 0 of 1." in page
    assert f"Look for {grouped(filled.codes['Q-0401'])} before you drive on." in page
    assert "Q-0401: 1 bottle in the crate?" in page
    sampler.land(COUNT, LOCATE, bottle=filled.codes["Q-0401"], how="left-behind")
    assert "Q-0401: 1 bottle in the crate?" not in words(sampler.read(BOARD))


def test_a_bottle_that_is_not_in_the_open_cooler_is_taken_out_by_saying_where_it_is(
    filled, sampler
):
    seal_all(filled, sampler)
    cooler = the_cooler(filled)
    sampler.land(cooler, cooler + "/reopen", reason="one rolled under the seat")
    sampler.land(cooler, LOCATE, bottle=filled.codes["Q-0403"], how="elsewhere", where="the seat")
    page = words(sampler.read(COUNT))
    assert "Seal 2 bottles in" in page
    assert filled.bottle("Q-0403")["cooler"] == ""
