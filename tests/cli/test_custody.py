"""``custody``: the page for the lid, of a cooler by id or by the number on its box."""

import base64
import json
from pathlib import Path

import pypdfium2 as pdfium
import pytest

from fieldapp.domain.facts import (
    BottleFilled,
    BottlePacked,
    CoolerSealed,
    EntryCorrected,
    Fact,
    HandoverOffered,
    HandoverStated,
    PersonListed,
    RoutePlanned,
    SiteListed,
)
from fieldapp.domain.timetext import format_utc
from fieldapp.projections import crates
from fieldapp.store import Store
from fieldapp.work.custody import print_custody, record_of
from tests.cli.at_work import command
from tests.counter import Node

COOLER = "C-7F3K2Q"
ADDRESS, RESIDENT = "17 Quillhaven Rise", "Orla Vantongeren"


def packed(node: Node, cooler: str = COOLER, route: str = "north", box: str = "3") -> list[Fact]:
    codes = [node.codes[visit] for visit in ("Q-0401", "Q-0402")]
    return [
        *(BottlePacked(bottle=code, cooler=cooler, route=route, box=box) for code in codes),
        CoolerSealed(cooler=cooler, route=route, box=box, seals=("88 214",), count=2),
    ]


@pytest.fixture
def node(tmp_path: Path):
    made = Node(tmp_path / "node")
    made.plan(["Q-0401", "Q-0402"])
    made.record(
        PersonListed(person="sampler-1", roles=("sampler",), name="Imaginary Sampler"),
        SiteListed(
            site="Q-0401", round="spring", route="north", tap="kitchen", tier="1", line="copper",
            name=RESIDENT, address=ADDRESS,
        ),
    )  # fmt: skip
    made.deviate("Q-0401")
    made.fill("Q-0401")
    made.fill("Q-0402")
    made.record(*packed(made), by="sampler-1")
    yield made
    made.store.close()


def text_of(pdf: bytes) -> str:
    return " ".join(pdfium.PdfDocument(pdf)[0].get_textpage().get_text_range().split())


def printed(node: Node, **asked: str) -> str:
    made = print_custody(node.store, progress=lambda *_: None, **asked)
    return text_of(base64.b64decode(made["pdf"]))


def test_the_page_says_what_the_record_says_of_each_bottle(node):
    page = printed(node, cooler=COOLER)
    for said in (
        "Cooler 3, Tuesday 2027-05-04", "Imaginary Sampler", "Invented Laboratory", "88 214",
        "Q-0401, kitchen", "lead, copper · no acid", "2027-05-04 06:00", "8 h 00, stated",
        "The tap was flushed just before the stand (low)", "2 bottles", "times of America/Boise",
    ):  # fmt: skip
        assert said in page


def test_no_name_or_address_of_a_resident_is_on_it(node):
    page = printed(node, cooler=COOLER)
    assert RESIDENT not in page
    assert ADDRESS not in page
    assert "Imaginary Resident" not in page


def test_a_corrected_time_of_collection_is_struck_through(node):
    code = node.codes["Q-0402"]
    with node.pages() as pages:
        entry = next(e for e in pages.story(f"bottle:{code}") if isinstance(e.fact, BottleFilled))
    data = {**entry.fact.data(), "done_at": format_utc(entry.at.replace(minute=45))}
    node.record(EntryCorrected(of=entry.hash, kind_="bottle.filled", data_=data), by="sampler-1")
    with node.pages() as pages:
        row = crates.cooler(pages, COOLER)
        line = next(one for one in record_of(pages, row).lines if one.code == code)
    assert (line.collected, line.struck) == ("2027-05-04 06:45", ("2027-05-04 06:00",))


def test_the_handover_stands_on_it_once_it_is_recorded(node):
    assert "not yet" in printed(node, cooler=COOLER)
    node.record(
        HandoverOffered(
            cooler=COOLER, route="north", seals=("88 214",), count=2, set="", to="courier"
        ),
        HandoverStated(cooler=COOLER, route="north", waybill="WB-7", name="N. Carrier"),
    )
    assert "to a courier, 2027-05-04 06:00, waybill WB-7" in printed(node, cooler=COOLER)


def test_a_bottle_that_this_node_does_not_know_is_on_it_with_its_code(node):
    stranger = BottlePacked(bottle="00000000000", cooler=COOLER, route="north", box="3")
    node.record(stranger, by="sampler-1")
    assert "0000-0000-000" in printed(node, cooler=COOLER)


def test_a_cooler_is_found_by_its_box_the_latest_load_of_it(node):
    assert printed(node, cooler="3") == printed(node, cooler=COOLER)
    assert printed(node, cooler=COOLER.lower()) == printed(node, cooler=COOLER)
    node.record(*packed(node, cooler="C-NEXT00"), by="sampler-1")
    assert "C-NEXT00" in printed(node, cooler="3")


@pytest.fixture
def folder(node: Node) -> Path:
    node.record(
        RoutePlanned(
            route="south", round="spring", title="S", day="2027-05-05", sampler="sampler-1"
        ),
        BottlePacked(bottle="00000000000", cooler="C-SVTH00", route="south", box="3"),
    )  # fmt: skip
    found = node.store.folder
    node.store.close()
    return found


def test_the_command_writes_the_page_and_says_what_is_on_it(folder, tmp_path):
    target = tmp_path / "lid.pdf"
    done = command("custody", COOLER, "-o", target, "--data", folder, "--json")
    assert done.exit_code == 0, done.stderr
    assert json.loads(done.stdout) == {"cooler": COOLER, "bottles": 2}
    assert "88 214" in text_of(target.read_bytes())


def test_a_box_on_two_routes_is_asked_about(folder, tmp_path):
    target = tmp_path / "lid.pdf"
    done = command("custody", "3", "-o", target, "--data", folder)
    assert done.exit_code == 1
    assert "2 coolers bear the number 3" in done.stderr
    assert not target.exists()
    done = command("custody", "3", "--route", "north", "-o", target, "--data", folder)
    assert done.exit_code == 0, done.stderr
    assert f"cooler {COOLER}, 2 bottles" in done.stdout


def test_a_cooler_that_nobody_packed_is_said_to_be_unknown(folder, tmp_path):
    done = command("custody", "C-NONE00", "-o", tmp_path / "lid.pdf", "--data", folder)
    assert done.exit_code == 1
    assert "does not know cooler C-NONE00" in done.stderr


def test_printing_records_nothing(folder, tmp_path):
    def entries() -> int:
        with Store.open(folder) as store, store.pages() as pages:
            return pages.count("SELECT COUNT(*) FROM entry")

    before = entries()
    command("custody", COOLER, "-o", tmp_path / "lid.pdf", "--data", folder)
    assert entries() == before
