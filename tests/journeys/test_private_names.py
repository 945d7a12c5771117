"""Residents' names, addresses, phones and ways in stand in ``private`` and nowhere else (R6).

One search goes through everything a rehearsed day leaves behind: signed bodies, page tables,
files, labels, QR codes, outputs, pages. A control shows that the same search does find them in
the private rows of the tablet.
"""

import json
import re
import shutil
import sqlite3
from base64 import b64encode
from collections.abc import Iterable, Iterator
from pathlib import Path
from types import SimpleNamespace

import pypdfium2 as pdfium
import pytest
import zxingcpp

from fieldapp.clock import SCRIPT
from fieldapp.domain.codes import normalise
from fieldapp.rehearsal.nodes import Process
from fieldapp.store import Store
from tests import nodes
from tests.journeys import walks
from tests.journeys.conftest import Kept
from tests.web.reader import Reader

PRIVATE_KEYS = ("name", "address", "phone", "contact", "access")


# the search


def texts(among: Iterable[str] = ("people", "sites")) -> list[str]:
    """Return every private text of the shipped file."""
    plan = walks.shipped_plan()
    return [one[key] for part in among for one in plan[part] for key in PRIVATE_KEYS if key in one]


def traces(among: Iterable[str] = ("people", "sites")) -> set[str]:
    """Return the private texts, their telling words, and phone numbers without blanks.

    A telling word begins with a capital, has six letters or more, and stands nowhere in the
    public part of the file.
    """
    plan = walks.shipped_plan()
    for one in (*plan["people"], *plan["sites"]):
        for key in PRIVATE_KEYS:
            one.pop(key, None)
    public = json.dumps(plan).casefold()
    found = set(texts(among))
    for text in texts(among):
        found |= {word for word in re.findall(r"[A-Z][a-z]{5,}", text)}
        found |= {"".join(text.split())} if text.startswith("+") else set()
    return {one for one in found if one.casefold() not in public and one != "Street"}


def found_in(what: bytes | str, among: Iterable[str] = ("people", "sites")) -> list[str]:
    """Return the private traces that stand in these bytes, plain or in base64."""
    raw = what.encode() if isinstance(what, str) else what
    plain = raw.decode("utf-8", "replace").casefold()
    return sorted(
        one
        for one in traces(among)
        if one.casefold() in plain or any(coded in raw for coded in _coded(one))
    )


def _coded(text: str) -> Iterator[bytes]:
    """Yield what base64, of either alphabet, makes of the text's middle at each of its offsets."""
    raw = text.encode()
    for before in range(3):
        whole = b64encode(b"\0" * before + raw)
        # the first and last characters mix in bits of the neighbours, so they are left off
        middle = whole[-(-before * 8 // 6) : (before + len(raw)) * 8 // 6]
        yield middle
        yield middle.translate(bytes.maketrans(b"+/", b"-_"))


def test_the_search_finds_every_private_text_in_the_private_rows_of_the_tablet(
    kept: Kept,
) -> None:
    rows = b"\n".join(private_rows(kept.nodes["tablet"]))
    assert set(found_in(rows)) == {one for one in traces() if not re.fullmatch(r"\+\d+", one)}
    assert len(traces()) > 50
    assert {"Oxenspindle", "+12085550143", "Gate code 4471"} <= traces()


@pytest.mark.parametrize("before", ["", "?", "??", "???>"])
def test_the_search_finds_a_text_in_base64_too(before: str) -> None:
    hidden = b64encode((before + "Gate code 4471" + "?>>?").encode())
    assert b"Gate" not in hidden
    assert found_in(hidden) == ["Gate code 4471"]
    assert found_in(hidden.translate(bytes.maketrans(b"+/", b"-_"))) == ["Gate code 4471"]


# what a kept day leaves behind


@pytest.mark.parametrize("name", ["central", "tablet"])
def test_no_signed_body_of_either_record_holds_private_text(kept: Kept, name: str) -> None:
    bodies = list(columns(kept.nodes[name], only=("entry", "borrowed", "branch")))
    assert len(bodies) > 100
    assert found_in(b"\n".join(bodies)) == []


@pytest.mark.parametrize("name", ["central", "tablet"])
def test_no_table_but_private_holds_private_text(kept: Kept, name: str) -> None:
    tables = names_of_tables(kept.nodes[name])
    assert {"p_fact", "p_site", "p_person", "act", "here"} <= set(tables)
    rest = columns(kept.nodes[name], only=[one for one in tables if one != "private"])
    assert found_in(b"\n".join(rest)) == []


@pytest.mark.parametrize("name", ["central", "tablet"])
def test_no_file_beside_the_database_holds_private_text_nor_does_its_name(
    kept: Kept, name: str
) -> None:
    files = [path for path in kept.nodes[name].rglob("*") if path.is_file()]
    names = [str(path.relative_to(kept.folder)) for path in files]
    assert {f"{name}/node.json", f"{name}/ledger.db"} <= set(names)
    assert found_in("\n".join(names)) == []
    for path in files:
        if path.name not in ("ledger.db", "ballast"):
            assert found_in(path.read_bytes()) == [], path.name


def test_neither_output_of_the_rehearsal_holds_private_text(kept: Kept) -> None:
    assert kept.walked.out
    assert found_in(kept.walked.out + kept.walked.err) == []


# labels


def test_labels_and_their_qr_codes_hold_no_private_text(kept: Kept, tmp_path: Path) -> None:
    central = copied(kept, "central", tmp_path)
    target = tmp_path / "labels.pdf"
    printed = walks.command("labels", nodes.ROUTE, "-o", str(target), "--data", str(central))
    assert printed.exit_code == 0, printed.stderr
    pdf = target.read_bytes()
    assert found_in(pdf) == []
    assert "Q-0412" in words_of(pdf)
    assert found_in(words_of(pdf)) == []
    document = pdfium.PdfDocument(pdf)
    pictures = [document[n].render(scale=150 / 72).to_pil() for n in range(len(document))]
    in_qr = [read.text for picture in pictures for read in zxingcpp.read_barcodes(picture)]
    assert len(in_qr) == 11
    assert {normalise(text) for text in in_qr} == set(in_qr), "eleven characters, nothing else"
    document.close()


# commands


def test_no_command_prints_private_text(tmp_path: Path) -> None:
    """Import, amend, faults, labels, invitation: nothing on either output, faults least of all."""
    data = ["--data", str(tmp_path / "desk")]
    plan = walks.shipped_plan()
    said = [
        walks.command("round", "import", str(nodes.SHIPPED), *data, "--json"),
        walks.command("round", "import", str(_moved(tmp_path, plan)), *data),
        walks.command("round", "import", str(_moved(tmp_path, plan)), *data, "--amend", "--json"),
        walks.command("labels", nodes.ROUTE, "-o", str(tmp_path / "l.pdf"), *data, "--json"),
        walks.command("central", "--invite", "sampler-1", *data, "--json"),
        walks.command("verify", *data, "--json"),
    ]
    assert [one.exit_code for one in said] == [0, 1, 0, 0, 0, 0]
    assert "site:Q-0412 (address)" in said[1].stderr, "that it differs is said, the text is not"
    for one in said:
        assert found_in(one.stdout + one.stderr) == []


def test_faults_of_private_texts_name_the_place_and_never_the_text(tmp_path: Path) -> None:
    plan = walks.shipped_plan()
    for place, key in enumerate(("address", "name", "phone", "access")):
        plan["sites"][place][key] = texts(["sites"])[place] * 200
    plan["sites"][4]["address"] = [texts(["sites"])[1]]
    plan["sites"][5]["name"] = "Hespera\u0007 Nightjarrow"
    plan["people"][0]["name"] = {"first": "Wrenna Oddquist"}
    plan["sites"][6]["telephone"] = "+1 208 555 0147"
    data = ["--data", str(tmp_path / "desk"), "--json"]
    said = walks.command("round", "import", str(walks.written(tmp_path, plan)), *data)
    assert said.exit_code == 1
    assert said.stdout == ""
    assert len(said.stderr.splitlines()) == 7
    assert found_in(said.stderr) == []


def _moved(folder: Path, plan: dict[str, object]) -> Path:
    changed = walks.shipped_plan()
    site = next(one for one in changed["sites"] if one["id"] == "Q-0412")
    site["address"] = "20 Oddmarrow Lane, Quillhaven"
    assert changed != plan
    return walks.written(folder, changed, "moved.json")


# a device of the Bench alone


def test_a_device_of_the_bench_alone_fetches_the_bottles_and_no_private_byte(
    kept: Kept, tmp_path: Path
) -> None:
    """It enrols for the clerk at the running central and fetches over HTTP, private part by none.

    Central's own ``running.json`` and what its process prints are searched while it runs.
    """
    central = copied(kept, "central", tmp_path)
    counter = tmp_path / "counter"
    counter.mkdir()
    shutil.copy(central / SCRIPT, counter)
    Store.open(counter, scripted=True).close()
    with Process("central", central) as running:
        url = running.url
        assert found_in((central / "running.json").read_bytes()) == []
        invited = walks.command(
            "central", "--invite", nodes.CLERK, "--data", str(central), "--json"
        )
        code = json.loads(invited.stdout)["code"]
        said = [
            invited,
            walks.command("enrol", url, code, "--data", str(counter)),
            walks.command("sync", "--data", str(counter), "--json"),
        ]
    assert [one.exit_code for one in said] == [0, 0, 0], said[-1].stderr
    assert found_in("".join(one.stdout + one.stderr for one in said)) == []
    assert json.loads(said[-1].stdout)["pulled"] > 50
    assert private_rows(counter) == []
    for path in counter.rglob("*"):
        if path.is_file() and path.name != "ballast":
            assert found_in(path.read_bytes()) == [], path.name
    with Store.open(counter) as store, store.pages() as pages:
        held = pages.bottles(round_id=nodes.ROUND)
        assert len(held) == 11
        assert all(bottle["filled"] and bottle["received_at"] for bottle in held)


# pages


def test_the_board_of_the_kitchen_shows_site_codes_and_no_address(pair: nodes.Pair) -> None:
    nodes.obey(pair, "V-0403")
    board = kitchen(pair).read("/kitchen/")
    assert "Q-0417" in board
    assert found_in(board, ["sites"]) == []


def test_the_page_of_a_visit_shows_the_site_at_hand_and_no_other(pair: nodes.Pair) -> None:
    nodes.obey(pair, "V-0403")
    shown = set(found_in(kitchen(pair).read("/kitchen/visits/V-0403"), ["sites"]))
    plan = walks.shipped_plan()
    at_hand = next(one for one in plan["sites"] if one["id"] == "Q-0417")
    mine = " ".join(at_hand[key] for key in PRIVATE_KEYS if key in at_hand)
    assert at_hand["address"] in shown
    assert shown == {one for one in shown if one in mine}


def test_a_visit_that_is_over_shows_no_address_any_more(pair: nodes.Pair) -> None:
    nodes.walk(pair, "V-0401")
    assert found_in(kitchen(pair).read("/kitchen/visits/V-0401"), ["sites"]) == []


def test_bench_and_desk_show_no_resident(kept: Kept, tmp_path: Path) -> None:
    with Store.open(copied(kept, "central", tmp_path)) as store:
        reader = Reader(SimpleNamespace(store=store), "coordinator-1")  # type: ignore[arg-type]
        seen = crawl(reader, ["/bench/", "/desk/"])
    assert any(path.startswith("/story/") for path in seen)
    assert any(path.startswith("/desk/rounds/") for path in seen)
    for path, page in seen.items():
        assert found_in(page, ["sites"]) == [], path


def kitchen(pair: nodes.Pair) -> Reader:
    """Return the sampler at the tablet."""
    return Reader(SimpleNamespace(store=pair.tablet), nodes.SAMPLER)  # type: ignore[arg-type]


def crawl(reader: Reader, begin: Iterable[str]) -> dict[str, str]:
    """Return what links of Bench, Desk and stories lead to by path, of papers their words too."""
    ahead, seen = list(begin), dict[str, str]()
    while ahead and len(seen) < 60:
        path = ahead.pop(0)
        if path in seen:
            continue
        answer = reader.client.get(path)
        assert answer.status_code == 200, path
        seen[path] = answer.get_data().decode("utf-8", "replace")
        if answer.mimetype == "application/pdf":
            seen[path] += words_of(answer.get_data())
            continue
        links = re.findall(r'href="(/(?:desk|bench|story)/[^"#]*)"', seen[path])
        ahead += [link.replace("&amp;", "&") for link in links]
    return seen


# what the tests stand on


def words_of(pdf: bytes) -> str:
    """Return the words on all pages of a PDF."""
    document = pdfium.PdfDocument(pdf)
    words = [document[n].get_textpage().get_text_range() for n in range(len(document))]
    document.close()
    return "\n".join(words)


def copied(kept: Kept, name: str, folder: Path) -> Path:
    """Return a copy of a kept node, for a test that goes on with it."""
    return Path(shutil.copytree(kept.nodes[name], folder / name))


def names_of_tables(folder: Path) -> list[str]:
    """Return every table of a node's database."""
    with opened(folder) as db:
        return [row[0] for row in db.execute("SELECT name FROM sqlite_schema WHERE type = 'table'")]


def columns(folder: Path, only: Iterable[str]) -> Iterator[bytes]:
    """Yield every value of these tables as bytes."""
    with opened(folder) as db:
        for table in only:
            for row in db.execute(f'SELECT * FROM "{table}"'):
                yield b" ".join(v if isinstance(v, bytes) else str(v).encode() for v in row)


def private_rows(folder: Path) -> list[bytes]:
    """Return the private parts that a node holds."""
    with opened(folder) as db:
        return [bytes(row[0]) for row in db.execute("SELECT p FROM private")]


def opened(folder: Path) -> sqlite3.Connection:
    """Open a closed node's database for reading, and change no byte of it."""
    uri = (folder / "ledger.db").resolve().as_uri()
    return sqlite3.connect(f"{uri}?mode=ro&immutable=1", uri=True, factory=_Closing)


class _Closing(sqlite3.Connection):
    """A connection that ``with`` closes."""

    def __exit__(self, *_: object) -> None:  # type: ignore[override]
        self.close()
