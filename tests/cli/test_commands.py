"""Every command as a person types it: what it prints where, its exit code, its sentence."""

import datetime
import http.client
import ipaddress
import json
import re
import sqlite3
import ssl
from collections.abc import Iterator
from datetime import UTC, timedelta
from pathlib import Path
from typing import Any

import click
import pytest
from cryptography import x509
from cryptography.hazmat.primitives import hashes, serialization
from cryptography.hazmat.primitives.asymmetric import ec
from cryptography.x509.oid import NameOID

from fieldapp.cli import main
from fieldapp.clock import write_script
from fieldapp.domain.protocols import find
from fieldapp.store import Store
from fieldapp.work.devices import VALID_FOR
from tests import nodes
from tests.cli import at_work
from tests.cli.at_work import command, fails
from tests.cli.conftest import Counter


def commands(group: click.Group = main, before: str = "") -> Iterator[tuple[str, click.Command]]:
    """Yield every command with the words that call it."""
    for name, one in group.commands.items():
        if isinstance(one, click.Group):
            yield from commands(one, f"{before}{name} ")
        else:
            yield before + name, one


ALL_COMMANDS = dict(commands())


# help and wrong use


@pytest.mark.parametrize("words", ALL_COMMANDS)
def test_every_command_has_help_with_an_example_that_it_would_take(words: str) -> None:
    done = command(*words.split(), "--help")
    assert done.exit_code == 0
    examples = re.findall(rf"tapwitness {words}\b[^\n]*", done.stdout)
    assert examples, done.stdout
    assert "Example" in done.stdout
    options = {name for param in ALL_COMMANDS[words].params for name in param.opts}
    for example in examples:
        assert set(re.findall(r"--[a-z]+", example)) <= options


def test_the_commands_of_this_issue_are_there() -> None:
    assert {
        "demo", "rehearse", "serve", "central", "enrol", "sync", "round import",
        "results import", "labels", "protocol list", "protocol check", "verify", "rebuild",
    } <= set(ALL_COMMANDS)  # fmt: skip


WRONG_USE = [
    ["labels"],
    ["labels", "R-0504"],
    ["labels", "R-0504", "-o", "l.pdf", "--spare", "-1"],
    ["labels", "R-0504", "-o", "l.pdf", "--spare", "many"],
    ["round", "import", "nowhere.json"],
    ["round", "import"],
    ["results", "import", "nowhere.csv"],
    ["enrol", "https://central.example"],
    ["serve", "--port", "0"],
    ["central", "--port", "70000"],
    ["protocol", "check"],
    ["rehearse", "nowhere.json"],
    ["rehearse", "--jason"],
    ["explain"],
]


@pytest.mark.parametrize("words", WRONG_USE, ids=" ".join)
def test_wrong_use_is_exit_2_and_makes_no_folder(words: list[str], tmp_path: Path) -> None:
    folder = tmp_path / "data"
    takes_folder = words[0] not in ("protocol", "rehearse", "explain")
    done = command(*words, *(["--data", folder] if takes_folder else []))
    assert (done.exit_code, done.stdout) == (2, "")
    assert done.stderr
    assert list(tmp_path.iterdir()) == []


# labels


def test_labels_of_a_route_print_one_code_for_each_planned_bottle(
    desk: Path, tmp_path: Path
) -> None:
    target = tmp_path / "labels.pdf"
    done = command("labels", nodes.ROUTE, "-o", target, "--data", desk, "--json")
    answer = json.loads(done.stdout)
    assert (done.exit_code, answer["issued"], len(answer["codes"])) == (0, 11, 11)
    assert "pdf" not in answer
    assert sorted(at_work.qr_codes(target.read_bytes())) == sorted(answer["codes"])


def test_labels_of_a_round_file_import_it_first(tmp_path: Path) -> None:
    folder, target = tmp_path / "desk", tmp_path / "labels.pdf"
    done = command("labels", nodes.SHIPPED, "-o", target, "--data", folder)
    assert done.exit_code == 0
    assert "11 labels, 11 codes issued" in done.stdout
    again = command("round", "import", nodes.SHIPPED, "--data", folder)
    assert "changes nothing" in again.stdout


def test_labels_of_a_file_that_differs_from_what_stands_print_nothing(
    desk: Path, tmp_path: Path
) -> None:
    plan = json.loads(nodes.SHIPPED.read_text("utf-8"))
    dropped = plan["routes"][0]["visits"].pop()
    file, target = tmp_path / "changed.json", tmp_path / "labels.pdf"
    file.write_text(json.dumps(plan), "utf-8")
    done = command("labels", file, "-o", target, "--data", desk)
    assert (done.exit_code, done.stdout) == (1, "")
    assert f"visit-dropped visit:{dropped['id']}" in done.stderr
    assert not target.exists()


def test_labels_again_print_the_same_codes_and_record_a_second_copy(
    desk: Path, tmp_path: Path
) -> None:
    printed = [labels(desk, tmp_path), labels(desk, tmp_path)]
    assert printed[0]["codes"] == printed[1]["codes"]
    assert [one["issued"] for one in printed] == [11, 0]
    with Store.open(desk) as store, store.pages() as pages:
        made = [e.fact for e in pages.story(f"route:{nodes.ROUTE}")]
    prints = [fact for fact in made if fact.kind == "labels.printed"]
    assert [fact.copy for fact in prints] == [1, 2]
    assert [list(fact.bottles) for fact in prints] == [printed[0]["codes"]] * 2


def test_three_spares_are_three_in_all_however_often_they_are_printed(
    desk: Path, tmp_path: Path
) -> None:
    first = labels(desk, tmp_path, "--spare", "2")
    more = labels(desk, tmp_path, "--spare", "3")
    again = labels(desk, tmp_path, "--spare", "3")
    assert [len(one["codes"]) for one in (first, more, again)] == [13, 14, 14]
    assert [one["issued"] for one in (first, more, again)] == [13, 1, 0]
    assert sorted(more["codes"]) == sorted(again["codes"])
    assert set(first["codes"]) < set(more["codes"])
    with Store.open(desk) as store, store.pages() as pages:
        assert sum(bool(bottle["spare"]) for bottle in pages.bottles()) == 3


def test_a_roll_has_a_page_for_each_label_and_a_sheet_many(desk: Path, tmp_path: Path) -> None:
    labels(desk, tmp_path, "--roll", "62x29")
    assert at_work.pages_of((tmp_path / "labels.pdf").read_bytes()) == 11
    sheet = "3x10,66.7x25.4,left=4.8,top=12.7,gap=3.2x0,page=letter"
    labels(desk, tmp_path, "--sheet", sheet)
    assert at_work.pages_of((tmp_path / "labels.pdf").read_bytes()) == 1


@pytest.mark.parametrize(
    ("paper", "pieces"),
    [
        (["--sheet", "3x10"], ["3x10", "66.7x25.4"]),
        (["--sheet", "3x10,90x25,page=letter"], ["do not fit", "215.9"]),
        (["--roll", "20x10"], ["20 x 10", "40 x 20"]),
        (["--roll", "wide"], ["wide", "62x29"]),
        (["--roll", "62x29", "--sheet", "3x10,60x25,page=a4"], ["roll"]),
    ],
)
def test_paper_that_cannot_be_is_refused_in_a_sentence_and_issues_no_code(
    paper: list[str], pieces: list[str], desk: Path, tmp_path: Path
) -> None:
    before = at_work.count(desk)
    target = tmp_path / "labels.pdf"
    fails(command("labels", nodes.ROUTE, "-o", target, "--data", desk, *paper), *pieces)
    assert not target.exists()
    assert at_work.count(desk) == before


def test_a_route_nobody_knows_is_named_in_a_sentence(desk: Path, tmp_path: Path) -> None:
    done = command("labels", "R-9999", "-o", tmp_path / "l.pdf", "--data", desk)
    fails(done, "R-9999")


def test_a_tablet_prints_again_what_it_holds_and_issues_spares_alone(tmp_path: Path) -> None:
    """The codes of planned draws are issued where the round was imported, by one hand (R15)."""
    pair = nodes.make_pair(tmp_path)
    codes = nodes.issue(pair.central)
    plan = json.loads(nodes.SHIPPED.read_text("utf-8"))
    plan["routes"][0]["visits"].append({
        "id": "V-0499", "site": "Q-0438", "protocol": "first-litre",
        "draws": [{"draw": 1, "purpose": "request"}],
    })  # fmt: skip
    pair.close()
    tablet, central = tmp_path / "tablet", tmp_path / "central"
    assert labels(tablet, tmp_path)["codes"] == codes
    spares = labels(tablet, tmp_path, "--spare", "4")
    assert (spares["issued"], len(spares["codes"])) == (2, len(codes) + 4)

    file = tmp_path / "longer.json"
    file.write_text(json.dumps(plan), "utf-8")
    done = command("round", "import", file, "--amend", "--data", central)
    assert done.exit_code == 0
    reopened = nodes.Pair(
        Store.open(central, pair.clock), Store.open(tablet, pair.clock), pair.clock
    )
    reopened.exchange()
    reopened.close()
    before = at_work.count(tablet)
    refused = command("labels", nodes.ROUTE, "-o", tmp_path / "l.pdf", "--data", tablet)
    fails(refused, nodes.ROUTE, "did not import")
    assert at_work.count(tablet) == before
    assert labels(central, tmp_path)["issued"] == 1


@pytest.mark.parametrize(
    ("typed", "exit_code"),
    [
        ("F8QY40YGEC9", 0),
        ("f8qy-40yg-ec9", 0),
        ("F8QY4OYGEC9", 0),  # the letter O for the digit
        ("TAPW1TNESSK", 0),
        ("F8QY40YGEC8", 1),
        ("8FQY40YGEC9", 1),
        ("F8QY40YGEC", 1),
        ("F8QY40YGEU9", 1),
    ],
)
def test_a_code_is_checked_by_its_check_character_with_no_folder_at_all(
    typed: str, exit_code: int, tmp_path: Path
) -> None:
    folder = tmp_path / "none"
    done = command("labels", "--check", typed, "--data", folder)
    assert done.exit_code == exit_code
    assert bool(done.stdout) == (exit_code == 0)
    assert bool(done.stderr) == (exit_code == 1)
    assert not folder.exists()


def labels(folder: Path, target: Path, *options: str) -> dict[str, Any]:
    """Print the shipped route's labels and return the answer."""
    output = ["-o", target / "labels.pdf", "--data", folder, "--json"]
    done = command("labels", nodes.ROUTE, *output, *options)
    assert done.exit_code == 0, done.stderr
    return dict(json.loads(done.stdout))


# results


def test_results_are_recorded_once_however_often_the_file_comes(
    counter: Counter, tmp_path: Path
) -> None:
    file = at_work.results(
        tmp_path,
        f"{counter.received},{counter.number},lead,3.2,ug/L",
        f"{counter.received},{counter.number},copper,<10,ug/L",
    )
    first = command("results", "import", file, "--data", counter.folder, "--json")
    again = command("results", "import", file, "--data", counter.folder, "--json")
    answers = [json.loads(done.stdout) for done in (first, again)]
    assert [done.exit_code for done in (first, again)] == [0, 0]
    assert [(a["rows"], a["bottles"], a["facts"]) for a in answers] == [(2, 1, 3), (2, 1, 0)]
    with Store.open(counter.folder) as store, store.pages() as pages:
        bottle = pages.bottle(counter.received)
    assert bottle is not None
    assert bottle["resulted"] == 1
    assert set(bottle["results"]) == {"lead", "copper"}


def test_results_by_the_laboratorys_number_alone_find_their_bottle(
    counter: Counter, tmp_path: Path
) -> None:
    file = at_work.results(
        tmp_path, f"{counter.number},lead,7", head="laboratory number,analyte,value"
    )
    fails_for_unit = command("results", "import", file, "--data", counter.folder)
    assert fails_for_unit.exit_code == 1
    head = "laboratory number,analyte,value,unit"
    file = at_work.results(tmp_path, f"{counter.number},lead,7,ug/L", head=head)
    assert command("results", "import", file, "--data", counter.folder).exit_code == 0
    with Store.open(counter.folder) as store, store.pages() as pages:
        bottle = pages.bottle(counter.received)
    assert bottle is not None
    assert bottle["results"]["lead"]["value"] == "7"


def test_a_number_that_no_receipt_told_is_taken_by_the_bottles_code_with_a_note(
    counter: Counter, tmp_path: Path
) -> None:
    file = at_work.results(tmp_path, f"{counter.filled},W27-0777,lead,5,ug/L")
    done = command("results", "import", file, "--data", counter.folder)
    assert done.exit_code == 0
    assert [line for line in done.stderr.splitlines() if "W27-0777" in line]
    with Store.open(counter.folder) as store, store.pages() as pages:
        bottle = pages.bottle(counter.filled)
    assert bottle is not None
    assert bottle["results"]["lead"]["value"] == "5"


def test_a_number_of_another_bottle_disagrees_and_nothing_is_recorded(
    counter: Counter, tmp_path: Path
) -> None:
    before = at_work.count(counter.folder)
    file = at_work.results(tmp_path, f"{counter.filled},{counter.number},lead,5,ug/L")
    done = command("results", "import", file, "--data", counter.folder)
    assert done.exit_code == 1
    assert [line for line in done.stderr.splitlines() if counter.number in line and "row 2" in line]
    assert at_work.count(counter.folder) == before


def test_every_fault_of_a_results_file_is_said_and_no_row_is_recorded(
    counter: Counter, tmp_path: Path
) -> None:
    before = at_work.count(counter.folder)
    file = at_work.results(
        tmp_path,
        f"{counter.received},{counter.number},lead,3.2,ug/L",
        f"{counter.received},{counter.number},copper,plenty,ug/L",
        "TAPW1TNESSK,,lead,1,ug/L",
        ",W27-0999,lead,1,grains",
    )
    done = command("results", "import", file, "--data", counter.folder)
    assert (done.exit_code, done.stdout) == (1, "")
    lines = done.stderr.splitlines()
    for row, value in ((3, "plenty"), (4, "TAPW1TNESSK"), (5, "W27-0999"), (5, "grains")):
        assert [x for x in lines if f"batch.csv, row {row}," in x and value in x], (row, value)
    assert len(lines) == 4
    assert at_work.count(counter.folder) == before


# invitations and enrolment


@pytest.fixture(scope="module")
def out(tmp_path_factory: pytest.TempPathFactory) -> Iterator[at_work.Node]:
    """Give a rehearsal's central with the shipped round, running."""
    folder = at_work.rehearsals(tmp_path_factory.mktemp("out") / "central")
    assert command("round", "import", nodes.SHIPPED, "--data", folder).exit_code == 0
    with at_work.running("central", folder) as node:
        yield node


def test_an_invitation_is_a_code_on_standard_output_and_the_rest_beside_it(
    out: at_work.Node,
) -> None:
    done = command("central", "--invite", nodes.SAMPLER, "--data", out.folder)
    assert re.fullmatch(r"[0-9A-Z]{7}-[0-9A-Z]{7}\n", done.stdout)
    assert nodes.SAMPLER in done.stderr


def test_nobody_is_invited_whom_no_round_lists(out: at_work.Node) -> None:
    done = command("central", "--invite", "sampler-9", "--data", out.folder)
    fails(done, "sampler-9", "sampler-1")


def test_a_device_enrols_once_with_a_code_and_nobody_else_with_the_same(
    out: at_work.Node, tmp_path: Path
) -> None:
    code = at_work.invited(out.folder)
    mine, theirs = (at_work.rehearsals(tmp_path / name) for name in ("mine", "theirs"))
    done = command("enrol", out.url, code.lower(), "--data", mine)
    assert (done.exit_code, done.stdout) == (0, "")
    assert nodes.SAMPLER in done.stderr
    fails(command("enrol", out.url, code, "--data", theirs), "used already")
    fails(command("sync", "--data", theirs), "enrolled nowhere")
    again = command("enrol", out.url, code, "--data", mine)
    assert again.exit_code == 0, "a lost answer is asked for again by the same device"


def test_a_wrong_code_enrols_nothing(out: at_work.Node, tmp_path: Path) -> None:
    device = at_work.rehearsals(tmp_path / "device")
    fails(command("enrol", out.url, "0000000-0000000", "--data", device), "No such code")
    assert not (device / "central.json").exists()


def test_a_code_is_too_old_after_ten_minutes_by_centrals_clock(
    out: at_work.Node, tmp_path: Path
) -> None:
    device = at_work.rehearsals(tmp_path / "device")
    code = at_work.invited(out.folder)
    shift = VALID_FOR + timedelta(seconds=1)
    write_script(out.folder, int(shift / timedelta(milliseconds=1)))
    fails(command("enrol", out.url, code, "--data", device), "too old")
    fresh = at_work.invited(out.folder)
    assert command("enrol", out.url, fresh, "--data", device).exit_code == 0


def test_a_real_device_does_not_enrol_at_a_rehearsals_central(
    out: at_work.Node, tmp_path: Path
) -> None:
    code = at_work.invited(out.folder)
    fails(command("enrol", out.url, code, "--data", tmp_path / "real"), "rehearsal")


def test_a_rehearsals_device_does_not_enrol_at_a_real_central(desk: Path, tmp_path: Path) -> None:
    device = at_work.rehearsals(tmp_path / "device")
    with at_work.running("central", desk) as central:
        code = at_work.invited(desk)
        fails(command("enrol", central.url, code, "--data", device), "rehearsal")
        assert command("enrol", central.url, code, "--data", tmp_path / "real").exit_code == 0


@pytest.mark.parametrize(
    "url",
    ["http://192.0.2.7:8443", "http://central.example", "ftp://127.0.0.1", "central.example"],
)
def test_plain_http_goes_to_this_machine_alone(url: str, tmp_path: Path) -> None:
    done = command("enrol", url, "0000000-0000000", "--data", tmp_path / "device")
    fails(done, url, "https://")


def test_a_device_that_is_enrolled_nowhere_is_told_what_to_run(tmp_path: Path) -> None:
    fails(command("sync", "--data", tmp_path / "device"), "tapwitness enrol")


def test_with_central_down_nothing_is_lost_and_later_all_of_it_drains(tmp_path: Path) -> None:
    central = at_work.rehearsals(tmp_path / "central")
    tablet = at_work.rehearsals(tmp_path / "tablet")
    assert (
        command("labels", nodes.SHIPPED, "-o", tmp_path / "l.pdf", "--data", central).exit_code == 0
    )
    with at_work.running("central", central) as node:
        url = node.url
        code = at_work.invited(central)
        assert command("enrol", url, code, "--data", tablet).exit_code == 0
        first = command("sync", "--data", tablet, "--json")
        assert json.loads(first.stdout)["pulled"] > 30
    spares = labels(tablet, tmp_path, "--spare", "3")["codes"][-3:]
    held = at_work.count(tablet)
    down = command("sync", "--data", tablet)
    fails(down)
    assert at_work.count(tablet) == held
    with at_work.running("central", central) as node:
        assert node.url == url, "a central comes back where devices look for it"
        drained = json.loads(command("sync", "--data", tablet, "--json").stdout)
    assert drained["pushed"] >= 4
    assert (drained["waiting"], drained["refused"]) == (0, [])
    with Store.open(central) as store, store.pages() as pages:
        assert all(pages.bottle(code) for code in spares)


# the door to others


def test_no_address_but_loopback_is_opened_without_a_certificate(tmp_path: Path) -> None:
    port = at_work.free_port()
    done = command("central", "--listen", f"0.0.0.0:{port}", "--data", tmp_path / "central")
    fails(done, "https", "--certificate")
    assert not (tmp_path / "central" / "running.json").exists()


@pytest.mark.parametrize("address", ["8443", "0.0.0.0:", ":", "0.0.0.0:door"])
def test_an_address_that_is_none_is_refused_with_an_example(address: str, tmp_path: Path) -> None:
    done = command("central", "--listen", address, "--data", tmp_path / "central")
    fails(done, repr(address), "0.0.0.0:8443")


def test_a_certificate_that_is_none_is_refused_in_a_sentence(tmp_path: Path) -> None:
    (tmp_path / "c.pem").write_text("no certificate", "ascii")
    asked = ["--certificate", tmp_path / "c.pem", "--key", tmp_path / "c.pem"]
    listen = ["--listen", f"127.0.0.1:{at_work.free_port()}"]
    done = command("central", *listen, *asked, "--data", tmp_path / "central")
    fails(done, "c.pem", "PEM")


def test_the_door_answers_devices_over_https_and_shows_no_page(desk: Path, tmp_path: Path) -> None:
    """The certificate is self-made: a device, which always verifies it, stays out."""
    port = at_work.free_port()
    certificate, key = self_made(tmp_path)
    door = ["--listen", f"127.0.0.1:{port}", "--certificate", str(certificate), "--key", str(key)]
    with at_work.running("central", desk, *door) as central:
        for path in ("/", "/desk/", "/bench/", "/kitchen/", "/state", "/work/sync", "/static/x"):
            assert asked_over_https(port, "GET", path)[0] == 404, path
        code, kind = asked_over_https(port, "POST", "/sync/v1/session")
        assert (code, kind) != (404, "text/html; charset=utf-8")
        assert kind == "application/problem+json"
        invitation = at_work.invited(desk)
        refused = command(
            "enrol", f"https://127.0.0.1:{port}", invitation, "--data", tmp_path / "device"
        )
        fails(refused, "certificate")
        here = command("enrol", central.url, invitation, "--data", tmp_path / "device")
        assert here.exit_code == 0, "the code was not used up by the attempt"


def asked_over_https(port: int, method: str, path: str) -> tuple[int, str]:
    """Return code and content type of an answer, whatever the certificate."""
    trusting = ssl.create_default_context()
    trusting.check_hostname, trusting.verify_mode = False, ssl.CERT_NONE
    line = http.client.HTTPSConnection("127.0.0.1", port, context=trusting, timeout=20)
    try:
        line.request(method, path, body=b"{}" if method == "POST" else None)
        answer = line.getresponse()
        answer.read()
        return answer.status, answer.headers.get("Content-Type", "")
    finally:
        line.close()


def self_made(folder: Path) -> tuple[Path, Path]:
    """Make a certificate for this machine that nobody vouches for; return both files."""
    private = ec.generate_private_key(ec.SECP256R1())
    name = x509.Name([x509.NameAttribute(NameOID.COMMON_NAME, "127.0.0.1")])
    now = datetime.datetime.now(UTC)
    made = (
        x509.CertificateBuilder()
        .subject_name(name)
        .issuer_name(name)
        .public_key(private.public_key())
        .serial_number(x509.random_serial_number())
        .not_valid_before(now - timedelta(days=1))
        .not_valid_after(now + timedelta(days=1))
        .add_extension(
            x509.SubjectAlternativeName([x509.IPAddress(ipaddress.ip_address("127.0.0.1"))]), False
        )
        .sign(private, hashes.SHA256())
    )
    certificate, key = folder / "certificate.pem", folder / "key.pem"
    pem = serialization.Encoding.PEM
    certificate.write_bytes(made.public_bytes(pem))
    plain = serialization.NoEncryption()
    key.write_bytes(private.private_bytes(pem, serialization.PrivateFormat.PKCS8, plain))
    return certificate, key


# evidence


def test_a_record_that_holds_verifies_with_exit_0(desk: Path) -> None:
    done = command("verify", "--data", desk)
    assert done.exit_code == 0
    assert "every one holds" in done.stdout
    report = json.loads(command("verify", "--json", "--data", desk).stdout)
    assert (report["chain"], report["first_fault"], report["logs"]) == ("intact", None, 1)


def test_a_changed_entry_is_exit_1_with_its_log_and_number(desk: Path) -> None:
    with sqlite3.connect(desk / "ledger.db") as db:
        db.execute("DROP TRIGGER entry_never_update")
        log, seq, body = db.execute(
            "SELECT log, seq, body FROM entry WHERE instr(body, CAST('kitchen' AS BLOB))"
        ).fetchone()
        body = body.replace(b"kitchen", b"laundry")
        db.execute("UPDATE entry SET body = ? WHERE log = ? AND seq = ?", (body, log, seq))
    db.close()
    done = command("verify", "--data", desk)
    assert (done.exit_code, done.stdout) == (1, "")
    assert done.stderr.startswith(f"log {log}, entry {seq}: ")
    told = command("verify", "--json", "--data", desk)
    report = json.loads(told.stdout)
    assert (told.exit_code, report["chain"]) == (1, "broken")
    assert (report["first_fault"]["log"], report["first_fault"]["seq"]) == (log, seq)


def test_a_record_shorter_than_its_anchor_is_broken(desk: Path) -> None:
    with sqlite3.connect(desk / "ledger.db") as db:
        db.execute("DROP TRIGGER entry_never_delete")
        db.execute("DELETE FROM entry WHERE seq = (SELECT MAX(seq) FROM entry)")
    db.close()
    fails(command("verify", "--data", desk), "entry ")


@pytest.mark.parametrize("damage", ["none", "garbled", "folder"])
def test_a_database_that_cannot_be_read_is_exit_1_with_a_sentence(
    damage: str, desk: Path, tmp_path: Path
) -> None:
    if damage == "garbled":
        (desk / "ledger.db").write_bytes(b"no database" * 1000)
    elif damage == "none":
        (desk / "ledger.db").unlink()
    folder = tmp_path / "nowhere" if damage == "folder" else desk
    fails(command("verify", "--data", folder), "ledger.db")
    assert not (tmp_path / "nowhere").exists()


def test_rebuilding_gives_the_same_page_tables(counter: Counter) -> None:
    before = page_tables(counter.folder)
    assert before["p_bottle"]
    assert before["p_visit"]
    done = command("rebuild", "--data", counter.folder)
    assert done.exit_code == 0
    assert page_tables(counter.folder) == before


def test_rebuilding_mends_a_page_table_that_was_spoiled(counter: Counter) -> None:
    before = page_tables(counter.folder)
    with sqlite3.connect(counter.folder / "ledger.db") as db:
        db.execute("UPDATE p_bottle SET outcome = 'refused'")
        db.execute("DELETE FROM p_visit")
    db.close()
    assert page_tables(counter.folder) != before
    assert command("rebuild", "--data", counter.folder).exit_code == 0
    assert page_tables(counter.folder) == before


def page_tables(folder: Path) -> dict[str, list[tuple[Any, ...]]]:
    """Return every row of every page table of a closed node."""
    with sqlite3.connect(folder / "ledger.db") as db:
        names = [
            row[0]
            for row in db.execute("SELECT name FROM sqlite_schema WHERE type = 'table'")
            if row[0].startswith("p_")
        ]
        found = {name: sorted(db.execute(f"SELECT * FROM {name}"), key=repr) for name in names}
    db.close()
    return found


# protocols


def test_the_shipped_protocols_are_listed_with_their_sources() -> None:
    rows = json.loads(command("protocol", "list", "--json").stdout)
    assert [row["id"] for row in rows] == ["first-and-fifth", "first-litre", "thirty-minute"]
    sources = ["40 CFR 141.86(b)", "40 CFR 141.86(b)", "Health Canada"]
    assert all(source in row["source"] for source, row in zip(sources, rows, strict=True))
    lines = command("protocol", "list").stdout.splitlines()
    assert [line.split()[0] for line in lines] == [row["id"] for row in rows]


def test_a_protocol_of_ones_own_is_checked_line_by_line(tmp_path: Path) -> None:
    text = find("first-litre").toml
    good, bad = tmp_path / "ours.toml", tmp_path / "theirs.toml"
    good.write_text(text.replace('id = "first-litre"', 'id = "our-litre"'), "utf-8")
    done = command("protocol", "check", good)
    assert (done.exit_code, done.stdout.split(":")[0]) == (0, "our-litre")
    wrong = text.replace('minimum = "PT6H"', 'minimum = "six hours"')
    bad.write_text(wrong.replace('water = "cold"', 'water = "tepid"'), "utf-8")
    done = command("protocol", "check", bad)
    assert (done.exit_code, done.stdout) == (1, "")
    lines = done.stderr.splitlines()
    assert len(lines) == 2
    at = wrong.splitlines().index('minimum = "six hours"') + 1
    assert [line for line in lines if f"line {at}" in line and "six hours" in line]
    assert [line for line in lines if "tepid" in line]


def test_a_protocol_that_is_no_text_is_refused_in_a_sentence(tmp_path: Path) -> None:
    file = tmp_path / "ours.toml"
    file.write_bytes(b'id = "\xff\xfe"')
    fails(command("protocol", "check", file), "ours.toml", "UTF-8")
