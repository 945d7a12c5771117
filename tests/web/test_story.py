"""The story of a bottle: one page from label to result, and the corrections made from it."""

import re
from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path

import pytest

from fieldapp.commands import bench, drawing, kitchen
from fieldapp.domain.facts import PersonListed, SiteListed
from tests.tap import OTHER, PAIR, SAMPLER, VISIT, Tap
from tests.web.reader import Reader, words

STREET, RESIDENT, SAID = "3 Imaginary Row", "Imaginary Resident", "the toilet at five, she says"
COLLEAGUE = "sampler-2"


@pytest.fixture
def tap(tmp_path: Path) -> Iterator[Tap]:
    made = Tap(tmp_path / "node")
    made.plan([VISIT, OTHER])
    made.name_sampler()
    made.record(
        PersonListed(person=COLLEAGUE, roles=("sampler",), name="Imaginary Colleague"),
        SiteListed(
            site=VISIT, round="spring", route="north", tap="kitchen", tier="1", line="copper",
            name=RESIDENT, address=STREET,
        ),
    )  # fmt: skip
    made.begin(VISIT)
    made.finish(VISIT)
    yield made
    made.store.close()


@pytest.fixture
def sampler(tap: Tap) -> Reader:
    return Reader(tap, SAMPLER)


def story(tap: Tap, visit: str = VISIT) -> str:
    return f"/story/{tap.codes[visit]}"


def entry(tap: Tap, kind: str, visit: str = VISIT) -> str:
    """Return the address of the entry of that kind that stands."""
    with tap.pages() as pages:
        (found,) = [e for e in pages.recorded(visit) if e.fact.kind == kind]
    return f"/story/entries/{found.hash}"


def test_a_story_goes_from_the_label_to_the_laboratory_line_by_line(tap: Tap, sampler: Reader):
    tap.decide(
        lambda p, r: bench.receive(
            p, r, bottle=tap.codes[VISIT], laboratory_number="W-7", counted=False
        )
    )
    said = words(sampler.read(story(tap)))

    steps = [
        "Planned for", "Code issued for draw 1", "Visit begun", "Last use of water",
        "scanned and in its place", "Filled at visit", "Visit closed: done",
        "Received: in, laboratory's number W-7",
    ]  # fmt: skip
    places = [said.index(step) for step in steps]
    assert places == sorted(places)


def test_each_line_names_who_when_basis_and_the_whole_hash(tap: Tap, sampler: Reader):
    page = sampler.read(story(tap))
    with tap.pages() as pages:
        entries = pages.story(f"bottle:{tap.codes[VISIT]}")
    for one in entries:
        assert one.hash in page
    said = words(page)
    assert "Imaginary Sampler" in said
    assert "recorded 06:00" in said
    assert "pressed" in said


def test_nothing_private_of_a_resident_stands_on_a_story(tap: Tap, sampler: Reader):
    tap.press(kitchen.state_deviation, VISIT, kind="tap-used-in-stand", reason=SAID)
    for path in (story(tap), f"/story/visits/{VISIT}"):
        page = sampler.read(path)
        assert "Water was used while it had to stand" in words(page)
        for private in (STREET, RESIDENT, SAID):
            assert private not in page


def test_the_litres_and_bottles_of_other_draws_are_not_in_a_story(tap: Tap, sampler: Reader):
    codes = tap.add(
        PAIR, "first-and-fifth",
        {"draw": 1, "purpose": "compliance"}, {"draw": 5, "purpose": "investigation"},
    )  # fmt: skip
    tap.begin(PAIR)
    for code in codes.values():
        tap.press(drawing.set_bottle, PAIR, code=code)
    tap.press(drawing.open_tap, PAIR)
    tap.press(drawing.fill, PAIR, fills={})

    first, fifth = (words(sampler.read(f"/story/{codes[draw]}")) for draw in (1, 5))
    assert "Draw 2 caught and poured away" not in first
    assert "Draw 2 caught and poured away" in fifth
    assert "draw 5" not in first
    assert "Filled at visit Q-0404, draw 5" in fifth


@pytest.mark.parametrize(("code", "answer"), [("7BCCV19XKXY", 404), ("LABEL", 422)])
def test_a_code_that_nobody_knows_is_told(tap: Tap, sampler: Reader, code, answer):
    found = sampler.client.get(f"/story/{code}")
    assert found.status_code == answer
    assert "Back" in words(found.get_data(as_text=True))


def test_every_code_on_the_pages_of_a_closed_visit_opens_the_story(tap: Tap, sampler: Reader):
    assert f'href="{story(tap)}"' in sampler.read(f"/kitchen/visits/{VISIT}")
    assert f'href="/story/visits/{VISIT}"' in sampler.read(f"/kitchen/visits/{VISIT}")


def test_a_code_in_a_sentence_opens_the_story_too(tap: Tap, sampler: Reader):
    tap.begin(OTHER)
    answer = sampler.send(
        f"/kitchen/visits/{OTHER}", f"/kitchen/visits/{OTHER}/set", code=tap.codes[VISIT]
    )
    assert answer.status_code == 422
    assert f'href="{story(tap)}"' in answer.get_data(as_text=True)


# corrections


def test_a_corrected_fill_is_struck_through_with_who_when_and_why(tap: Tap, sampler: Reader):
    here = entry(tap, "bottle.filled")
    tap.clock.pass_by(hours=3)
    page = sampler.land(here, here, fill="below", volume_ml="930", reason="looked again")

    line = next(li for li in page.split("<li") if "Corrected" in li)
    assert "<del>Filled at visit" in line
    assert "<del>to the line</del> <ins>below the line</ins>" in line
    assert "<ins>930" in line
    said = words(line)
    assert "looked again" in said
    assert "Imaginary Sampler" in said
    assert said.index("06:00") < said.index("09:00")  # done then, corrected now
    with tap.pages() as pages:
        assert pages.bottle(tap.codes[VISIT])["fill"] == "below"


def test_a_second_correction_takes_the_place_of_the_first_and_both_stay_readable(
    tap: Tap, sampler: Reader
):
    here = entry(tap, "bottle.filled")
    sampler.land(here, here, fill="below", reason="looked again")
    again = entry(tap, "bottle.filled")
    page = sampler.land(again, again, fill="over", reason="looked twice")

    said = words(page)
    assert said.count("Corrected") == 2
    assert said.index("looked again") < said.index("looked twice")
    assert f'href="{again}"' not in page  # what stands now is corrected, not what stood


def test_an_old_page_of_a_correction_says_that_it_is_over(tap: Tap, sampler: Reader):
    here = entry(tap, "bottle.filled")
    hidden = sampler.hidden(here, here)
    sampler.land(here, here, fill="below", reason="looked again")
    answer = sampler.client.post(here, data={**hidden, "fill": "over", "reason": "no"})

    assert answer.status_code == 422
    assert "since this page was drawn" in words(answer.get_data(as_text=True))


def test_the_last_use_is_corrected_by_its_own_times(tap: Tap, sampler: Reader):
    here = entry(tap, "water.used")
    sampler.land(
        here, here, exact="at", at_local="2027-05-04T00:50", where="bath", reason="she said one"
    )

    with tap.pages() as pages:
        assert pages.visit(VISIT)["stand_verdict"] == "fails"
        (used,) = [e.fact for e in pages.recorded(VISIT) if e.fact.kind == "water.used"]
    assert used.from_ == used.to == "2027-05-04T06:50:00.000Z"
    said = words(sampler.read(f"/story/visits/{VISIT}"))
    assert "stood" in said  # the finding stands on the story


def test_a_page_sent_as_it_was_shown_corrects_nothing(tap: Tap, sampler: Reader):
    for kind in ("bottle.filled", "water.used", "visit.signed", "visit.closed", "visit.opened"):
        here = entry(tap, kind)
        page = sampler.read(here)
        shown = dict(re.findall(r'<input[^>]* name="(\w+)" value="([^"]*)"', page))
        chosen = {
            name: re.search(r'<option value="([^"]*)" selected', rest).group(1)
            for name, rest in re.findall(r'<select [^>]*name="(\w+)">(.*?)</select>', page, re.S)
            if "selected" in rest
        }
        answer = sampler.client.post(here, data={**shown, **chosen, "reason": "nothing"})
        assert answer.status_code == 422, kind
        assert "Nothing here differs" in words(answer.get_data(as_text=True)), kind


def test_a_name_is_corrected_and_shown_on_no_story(tap: Tap, sampler: Reader):
    here = entry(tap, "visit.signed")
    page = sampler.land(here, here, name="Wilhelmet Asterby", reason="misspelt")

    assert "changed, kept private" in words(page)
    assert "Asterby" not in page
    assert "Asterby" in sampler.read(entry(tap, "visit.signed"))


def test_a_colleague_is_offered_no_correction_of_what_another_recorded(tap: Tap):
    colleague = Reader(tap, COLLEAGUE)
    assert "/story/entries/" not in colleague.read(story(tap))
    assert "whoever recorded it corrects it" in words(colleague.read(entry(tap, "bottle.filled")))


def test_a_withdrawn_entry_stays_struck_through(tap: Tap, sampler: Reader):
    tap.press(kitchen.state_deviation, VISIT, kind="low-flow")
    with tap.pages() as pages:
        said = next(e for e in pages.recorded(VISIT) if e.fact.kind == "deviation.stated")
    tap.press(kitchen.take_back, VISIT, of=said.hash, by=SAMPLER)
    page = sampler.read(f"/story/visits/{VISIT}")

    line = next(li for li in page.split("<li") if "Taken back" in li)
    assert "<del>Difference noted" in line


def test_the_done_at_of_a_fill_is_corrected_in_local_time(tap: Tap, sampler: Reader):
    here = entry(tap, "bottle.filled")
    with tap.pages() as pages:
        before = next(e for e in pages.recorded(VISIT) if e.fact.kind == "bottle.filled").done_at
    sampler.land(here, here, done_local="2027-05-04T05:45", reason="the tablet was in the van")

    with tap.pages() as pages:
        now = next(e for e in pages.recorded(VISIT) if e.fact.kind == "bottle.filled").done_at
    assert timedelta(minutes=14) < before - now < timedelta(minutes=17)


# every code on every page

GROUPED = re.compile(r"\b[0-9A-Z]{4}-[0-9A-Z]{4}-[0-9A-Z]{3}\b")


def loose_codes(page: str) -> list[str]:
    """Return the codes that a page shows outside a link to a story."""
    for gone in (
        r"<title>.*?</title>",
        r'<h1><span class="code">.*?</h1>',  # the story's own heading
        r'<a class="code" href="/story/[^>]*>.*?</a>',
        r'<span class="unseen">.*?</span>',  # the rail, said to a screen reader
        r'="[^"]*"',
    ):
        page = re.sub(gone, "", page, flags=re.DOTALL)
    return [page[max(0, one.start() - 60) : one.end()] for one in GROUPED.finditer(page)]


def test_a_code_outside_a_link_is_seen_by_this_test():
    assert loose_codes("<p>Bottle 2HB4-X90T-C7T</p>")
    assert not loose_codes('<a class="code" href="/story/2HB4X90TC7T">2HB4-X90T-C7T</a>')


def test_every_code_on_every_page_opens_its_story(tap: Tap, sampler: Reader):
    tap.decide(lambda p, r: bench.receive(p, r, bottle=tap.codes[VISIT], reason="", counted=False))
    tap.begin(OTHER)
    code = tap.codes[VISIT]
    with tap.pages() as pages:
        findings = [row["finding"] for row in pages.rows("SELECT finding FROM p_finding")]
    for path in (
        f"/kitchen/visits/{VISIT}", f"/kitchen/visits/{OTHER}", "/kitchen/routes/north",
        "/kitchen/routes/north/count", f"/story/{code}", f"/story/visits/{VISIT}",
        "/bench/", f"/bench/?bottle={code}", "/desk/", "/desk/rounds/spring",
        "/desk/rounds/spring?show=filled", "/desk/rounds/spring?show=findings",
        f"/desk/bottles/{code}", *(f"/desk/findings/{one}" for one in findings),
    ):  # fmt: skip
        assert loose_codes(sampler.read(path)) == [], path
