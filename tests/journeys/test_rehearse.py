"""The whole way of a round: the shipped day, and days on which one thing is otherwise."""

import contextlib
import json
import shutil
import sqlite3
import subprocess
import sys
import tempfile
from collections.abc import Iterator, Mapping
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import numpy
import pytest

from fieldapp.rehearsal import kitchen
from fieldapp.rehearsal.account import Account, account_of
from fieldapp.store import Store
from sync.folder import FolderLock
from tests import nodes
from tests.journeys import walks
from tests.journeys.conftest import Kept

Plan = dict[str, Any]
ALL_ELEVEN = {
    "issued": 11, "filled": 11, "received": 11, "refused": 0, "to_analyse": 11, "resulted": 11,
}  # fmt: skip


# the shipped day


def test_the_shipped_day_is_good(kept: Kept) -> None:
    assert kept.walked.code == 0, kept.walked.err


def test_standard_output_holds_one_json_of_the_named_keys_and_nothing_else(kept: Kept) -> None:
    assert kept.walked.out.count("\n") == 1
    account = json.loads(kept.walked.out)
    assert list(account) == walks.KEYS
    assert list(account["bottles"]) == walks.COUNTS
    assert set(account["ninetieth"]) == {"lead", "copper"}
    for figure in account["ninetieth"].values():
        assert list(figure) == ["value", "unit", "n", "convention"]


def test_every_bottle_of_the_shipped_day_goes_the_whole_way(kept: Kept) -> None:
    account = kept.walked.account
    assert account["visits"] == 8
    assert account["bottles"] == ALL_ELEVEN
    assert account["findings"] == []
    assert account["chain"] == "intact"
    assert account["photos"] == 3


def test_the_figures_agree_with_another_librarys_arithmetic(kept: Kept) -> None:
    plan = walks.shipped_plan()
    for analyte, in_ug in (("lead", 1.0), ("copper", 1000.0)):
        levels = compliance_levels(plan, analyte, in_ug)
        figure = kept.walked.account["ninetieth"][analyte]
        outside = numpy.quantile(levels, 0.9, method="interpolated_inverted_cdf")
        assert float(figure["value"]) == pytest.approx(float(outside), abs=1e-9)
        assert figure["n"] == len(levels)
        assert (figure["unit"], figure["convention"]) == ("ug/L", "interpolate")


def test_progress_goes_to_standard_error_a_line_a_place(kept: Kept) -> None:
    lines = kept.walked.err.splitlines()
    assert [line.split(":")[0] for line in lines] == [
        "Desk", "Kitchen tablet", "Kitchen tablet", "Bench", "Desk",
    ]  # fmt: skip
    assert "11 labels printed" in lines[0]
    assert "waiting 0" in lines[2]
    assert "2 coolers opened, 11 bottles scanned" in lines[3]


def test_nothing_is_left_in_home_or_among_temporary_files(kept: Kept) -> None:
    assert list(kept.home.rglob("*")) == []
    assert list(kept.spare.rglob("*")) == []


def test_what_is_kept_is_a_central_and_a_tablet_closed_with_a_checkpoint(kept: Kept) -> None:
    assert list(kept.nodes) == ["central", "tablet"]
    for folder in kept.nodes.values():
        names = {path.name for path in folder.iterdir()}
        assert "ledger.db" in names
        assert not names & {"ledger.db-wal", "ledger.db-shm", "running.json"}


def test_no_process_holds_a_kept_folder_any_more(kept: Kept) -> None:
    for folder in kept.nodes.values():
        with FolderLock(folder):
            pass


@pytest.mark.parametrize("name", ["central", "tablet"])
def test_a_kept_node_verifies_and_verifying_changes_no_byte(kept: Kept, name: str) -> None:
    folder = kept.nodes[name]
    before = bytes_of(folder)
    env = walks.bare(kept.home, kept.spare)
    said = walks.run("verify", "--json", "--data", str(folder), cwd=kept.folder, env=env)
    assert said.code == 0, said.err
    report = json.loads(said.out)
    assert (report["chain"], report["first_fault"]) == ("intact", None)
    tables = "SELECT COUNT(*) FROM entry UNION ALL SELECT COUNT(*) FROM borrowed"
    assert report["entries"] == sum(one_column(folder / "ledger.db", tables))
    assert bytes_of(folder) == before


def test_central_holds_what_the_tablet_wrote_entry_by_entry(kept: Kept) -> None:
    tablet, central = (kept.nodes[name] / "ledger.db" for name in ("tablet", "central"))
    (log,) = one_column(tablet, "SELECT log FROM own_log")
    asked = "SELECT hash FROM entry WHERE log = ? ORDER BY seq"
    written = one_column(tablet, asked, log)
    assert written == one_column(central, asked, log)
    assert len(written) > 80
    assert one_column(tablet, "SELECT seq FROM acknowledgement WHERE log = ?", log) == [
        len(written)
    ]


def test_the_nodes_of_a_rehearsal_say_that_their_clock_is_scripted(kept: Kept) -> None:
    for folder in kept.nodes.values():
        asked = "SELECT data FROM p_fact WHERE kind = 'log.opened'"
        opened = [json.loads(text) for text in one_column(folder / "ledger.db", asked)]
        assert {data["clock"] for data in opened} == {"scripted"}


# what good means


GOOD = Account(
    visits=8, bottles=ALL_ELEVEN, entries=220, photos=3, findings=[], ninetieth={}, chain="intact"
)  # fmt: skip


@pytest.mark.parametrize(
    ("what", "found"),
    [
        ("bottles", {**ALL_ELEVEN, "filled": 10}),
        ("bottles", {**ALL_ELEVEN, "received": 10}),
        ("bottles", {**ALL_ELEVEN, "issued": 12}),
        ("bottles", {**ALL_ELEVEN, "resulted": 10}),
        ("findings", [{"kind": "void-but-filled", "about": "bottle:F8QY40YGEC9", "says": "…"}]),
        ("chain", "broken"),
        ("stopped", True),
    ],
)
def test_one_thing_open_is_enough_for_exit_1(what: str, found: object) -> None:
    assert GOOD.good
    assert not replace(GOOD, **{what: found}).good


@pytest.mark.parametrize("name", ["central", "tablet"])
def test_a_chain_that_is_broken_at_either_end_is_told(
    kept: Kept, name: str, tmp_path: Path
) -> None:
    nodes_of = {one: Path(shutil.copytree(kept.nodes[one], tmp_path / one)) for one in kept.nodes}
    with contextlib.closing(sqlite3.connect(nodes_of[name] / "ledger.db")) as db, db:
        db.execute("DROP TRIGGER entry_never_update")
        db.execute("UPDATE entry SET sig = zeroblob(64) WHERE seq = 5")
    lines: list[str] = []
    account = account_of(nodes_of["central"], [nodes_of["tablet"]], nodes.ROUND, lines)
    assert account.chain == "broken"
    assert account.bottles == ALL_ELEVEN, "the counts are told as they stand"
    assert [line for line in lines if line.startswith(f"{name}: ")]


# days on which one thing is otherwise


def test_a_result_left_out_is_the_one_thing_missing_and_no_file_stays(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    spare = tmp_path / "spare"
    spare.mkdir()
    monkeypatch.setattr(tempfile, "tempdir", str(spare))

    def change(plan: Plan) -> None:
        results = plan["rehearsal"]["results"]
        plan["rehearsal"]["results"] = [r for r in results if r["analyte"] != "copper"]

    walked = walks.rehearse(walks.short(tmp_path, ["V-0401"], change))
    assert walked.code == 1
    assert walked.bottles == counts(issued=1, filled=1, received=1, to_analyse=1, resulted=0)
    assert walked.account["ninetieth"]["lead"]["n"] == 1
    assert walked.account["ninetieth"]["copper"] == {
        "value": None, "unit": "ug/L", "n": 0, "convention": "interpolate",
    }  # fmt: skip
    assert (walked.kinds, walked.account["chain"]) == ([], "intact")
    assert list(spare.iterdir()) == []


def test_a_filter_in_the_way_ends_the_visit_and_its_bottle_stays_empty(tmp_path: Path) -> None:
    def change(plan: Plan) -> None:
        walks.script_of(plan, "V-0401")["answers"] = {"filter": "filter"}

    walked = walks.rehearse(walks.short(tmp_path, ["V-0401"], change))
    assert walked.code == 1
    assert walked.bottles == counts(issued=1, to_analyse=1)
    assert walked.account["visits"] == 1, "the visit is closed, with its outcome"
    assert walked.kinds == []


def test_a_bottle_with_a_deviation_is_held_and_counts_as_received(tmp_path: Path) -> None:
    """It is kept where an earlier rehearsal was, which makes room."""

    def change(plan: Plan) -> None:
        walks.script_of(plan, "V-0401")["answers"] = {"aerator": "cleaned"}

    keep = tmp_path / "kept"
    for name in ("central", "tablet-2"):
        walks.rehearsals_node(keep / name)
    walked = walks.rehearse(walks.short(tmp_path, ["V-0401"], change), "--keep", str(keep))
    held = one_column(keep / "central" / "ledger.db", "SELECT outcome FROM p_bottle")
    assert held == ["held"]
    assert walked.bottles == counts(issued=1, filled=1, received=1, to_analyse=1, resulted=1)
    assert sorted(path.name for path in keep.iterdir()) == ["central", "tablet"]


def test_two_samplers_and_two_days_take_two_tablets_and_one_central(tmp_path: Path) -> None:
    """The second sampler goes on two days; every visit is of its own route and day."""
    keep = tmp_path / "kept"
    file = walks.short(tmp_path, ["V-0401", "V-0405", "V-0406"], on_two_tablets)
    walked = walks.rehearse(file, "--keep", str(keep))
    assert walked.code == 0, walked.out
    assert walked.bottles == counts(issued=3, filled=3, received=3, to_analyse=3, resulted=3)
    assert sorted(path.name for path in keep.iterdir()) == ["central", "tablet", "tablet-2"]
    asked = "SELECT visit FROM p_visit WHERE state = 'closed' ORDER BY closed_at"
    assert one_column(keep / "central" / "ledger.db", asked) == ["V-0401", "V-0405", "V-0406"]
    asked = "SELECT visit FROM p_visit ORDER BY visit"
    assert one_column(keep / "tablet" / "ledger.db", asked) == ["V-0401"]
    assert one_column(keep / "tablet-2" / "ledger.db", asked) == ["V-0405", "V-0406"]
    asked = "SELECT filled_at FROM p_bottle ORDER BY filled_at"
    days = [at[:10] for at in one_column(keep / "central" / "ledger.db", asked)]
    assert days == ["2027-05-04", "2027-05-04", "2027-05-06"]


def test_the_night_the_clocks_go_forward_is_an_hour_shorter_for_the_water(
    tmp_path: Path,
) -> None:
    """From 22:00 to 04:30 a wall clock shows six and a half hours; the water stood five and a half.

    America/Boise went from UTC-7 to UTC-6 at 02:00 on 14 March 2027 (second Sunday of March).
    """
    keep = tmp_path / "kept"
    file = walks.short(tmp_path, ["V-0401"], in_the_night_of_march)
    walked = walks.rehearse(file, "--keep", str(keep))
    assert walked.code == 0, walked.out
    central = keep / "central" / "ledger.db"
    (at,) = one_column(central, "SELECT filled_at FROM p_bottle")
    filled = datetime.fromisoformat(at)
    last_use = datetime(2027, 3, 14, 5, 0, tzinfo=UTC)
    assert (filled - last_use).total_seconds() >= 6 * 3600
    local = filled.astimezone(ZoneInfo("America/Boise"))
    assert (local.hour, local.minute) in {(5, 0), (5, 1)}, "no sooner, and hardly later"
    assert one_column(central, "SELECT stand_verdict FROM p_visit") == ["passes"]


def test_a_pair_counts_as_one_site_and_the_higher_of_the_two_stands(tmp_path: Path) -> None:
    walked = walks.rehearse(walks.short(tmp_path, ["V-0403", "V-0404"], pairs_for_compliance))
    assert walked.code == 0, walked.out
    assert walked.bottles["issued"] == 4
    lead, copper = (walked.account["ninetieth"][name] for name in ("lead", "copper"))
    assert (lead["n"], copper["n"]) == (2, 2)
    assert lead["value"] == "9.7", "fewer than five: the highest, of fifth litre 9.7 and first 8"
    assert copper["value"] == "520"


def test_a_day_without_a_script_is_walked_as_expected_and_lacks_results(tmp_path: Path) -> None:
    def change(plan: Plan) -> None:
        del plan["rehearsal"]

    walked = walks.rehearse(walks.short(tmp_path, ["V-0402"], change))
    assert walked.code == 1
    assert walked.bottles == counts(issued=2, filled=2, received=2, to_analyse=2)
    assert walked.kinds == []


def test_every_answer_has_its_way_to_the_end_of_the_visit(tmp_path: Path) -> None:
    """A visit for each answer and each kind of last use; none leaves the walker standing."""
    plan = odd_days()
    keep = tmp_path / "kept"
    walked = walks.rehearse(walks.written(tmp_path, plan), "--keep", str(keep))
    assert "Stopped" not in walked.err
    assert walked.account["visits"] == len(ODD_ANSWERS) + len(ODD_USES)
    central = keep / "central" / "ledger.db"
    ended = dict(rows(central, "SELECT visit, outcome FROM p_visit"))
    filled = dict(rows(central, "SELECT visit, MIN(filled) FROM p_bottle GROUP BY visit"))
    received = dict(rows(central, "SELECT visit, MIN(outcome) FROM p_bottle GROUP BY visit"))
    assert {
        answer: (ended[visit], filled[visit], received[visit])
        for visit, answer in zip(sorted(ended), (*ODD_ANSWERS, *ODD_USES), strict=True)
    } == {**ODD_ANSWERS, **{name: expected for name, (_, expected) in ODD_USES.items()}}


def test_a_page_that_fails_the_walker_stops_it_with_what_was_counted_and_no_private_text(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(kitchen, "MOST_PAGES", 5)
    walked = walks.rehearse(walks.short(tmp_path, ["V-0401"], lambda plan: None))
    assert walked.code == 1
    assert walked.bottles == counts(issued=1, to_analyse=1)
    (line,) = [one for one in walked.err.splitlines() if one.startswith("Stopped: ")]
    assert "V-0401 does not come to an end" in line
    assert "Oddmarrow" not in walked.err
    assert "Quarrelow" not in walked.err


def test_a_folder_that_no_rehearsal_made_is_never_replaced(tmp_path: Path) -> None:
    """A real central may lie where somebody keeps a rehearsal."""
    keep = tmp_path / "kept"
    with Store.open(keep / "central") as store:
        nodes.import_shipped(store)
    before = bytes_of(keep)
    walked = walks.rehearse(
        walks.short(tmp_path, ["V-0401"], lambda plan: None), "--keep", str(keep)
    )
    assert (walked.code, walked.out) == (1, "")
    assert "--keep" in walked.err
    assert bytes_of(keep) == before


# ended from outside


def test_a_rehearsal_that_is_told_to_end_ends_its_nodes_too(tmp_path: Path) -> None:
    home, spare, keep = (tmp_path / name for name in ("home", "spare", "kept"))
    home.mkdir()
    spare.mkdir()
    with started("rehearse", "--keep", str(keep), env=walks.bare(home, spare)) as process:
        assert process.stderr is not None
        next(line for line in process.stderr if line.startswith("Kitchen tablet: enrolled"))
        process.terminate()
        assert process.wait(60) == 1
    for name in ("central", "tablet"):
        with FolderLock(keep / name):
            pass
        assert not (keep / name / "ledger.db-wal").exists()


def test_a_file_with_faults_says_all_of_them_and_walks_nothing(tmp_path: Path) -> None:
    def change(plan: Plan) -> None:
        plan["round"]["zone"] = "Moon/Crater"
        plan["routes"][0]["visits"][0]["protocol"] = "second-litre"
        plan["sites"][0]["tier"] = "9"

    walked = walks.rehearse(walks.short(tmp_path, ["V-0401"], change))
    assert (walked.code, walked.out) == (1, "")
    assert len(walked.err.splitlines()) == 3
    for value in ("Moon/Crater", "second-litre", "9"):
        assert value in walked.err


def test_a_script_with_faults_says_all_of_them_and_walks_nothing(tmp_path: Path) -> None:
    def change(plan: Plan) -> None:
        walks.script_of(plan, "V-0401")["answers"] = {"filter": "perhaps"}
        plan["rehearsal"]["begins"] = "half past five"

    walked = walks.rehearse(walks.short(tmp_path, ["V-0401"], change))
    assert (walked.code, walked.out) == (1, "")
    assert len(walked.err.splitlines()) == 2
    assert "perhaps" in walked.err
    assert "half past five" in walked.err


# what the tests stand on


ODD_ANSWERS: dict[tuple[str, str], tuple[str, int, str]] = {
    ("consent", "refused"): ("refused", 0, ""),
    ("tap", "hot"): ("done", 1, "held"),
    ("tap", "not-drinking"): ("unfit", 0, ""),
    ("filter", "bypassed"): ("done", 1, "accepted"),
    ("filter", "filter"): ("unfit", 0, ""),
    ("filter", "softener"): ("unfit", 0, ""),
    ("aerator", "cleaned"): ("done", 1, "held"),
    ("aerator", "removed"): ("done", 1, "held"),
    ("plumbing-work", "recent"): ("done", 1, "held"),
    ("plumbing-work", "not-known"): ("done", 1, "accepted"),
}
"""An answer to a question of the pair, and how its visit ends: outcome, filled, receipt."""

ODD_USES: dict[str, tuple[Plan, tuple[str, int, str]]] = {
    "too short, and away meanwhile": (
        {
            "waits": "away",
            "last_use": {"hours_before": "3", "exact": "at", "where": "bath"},
        },
        ("done", 1, "accepted"),
    ),
    "unknown, and over the line": (
        {"last_use": {"exact": "unknown", "where": "this-tap"}, "fill": {"1": "over"}},
        ("done", 1, "held"),
    ),
    "too long": (
        {"last_use": {"hours_before": "30", "exact": "about", "where": "this-tap"}},
        ("done", 1, "held"),
    ),
    "between, and below the line": (
        {
            "last_use": {"at": "21:00", "to": "22:00", "exact": "between", "where": "bath"},
            "fill": {"1": "below"},
        },
        ("done", 1, "held"),
    ),
}


def odd_days() -> Plan:
    """Return a round of one site a visit: pairs for the answers, first litres for the last uses."""
    plan = walks.shipped_plan()
    site = plan["sites"].pop(0)
    odd = [("first-and-fifth", (1, 5), {"answers": {q: a}}) for q, a in ODD_ANSWERS]
    odd += [("first-litre", (1,), script) for script, _ in ODD_USES.values()]
    plan["sites"] = [{**site, "id": f"S-{n:02}"} for n in range(len(odd))]
    plan["routes"][0]["visits"] = [
        {
            "id": f"V-{n:02}", "site": f"S-{n:02}", "protocol": protocol,
            "draws": [{"draw": draw, "purpose": "investigation"} for draw in draws],
        }
        for n, (protocol, draws, _) in enumerate(odd)
    ]  # fmt: skip
    visits = [{"id": f"V-{n:02}", **script} for n, (_, _, script) in enumerate(odd)]
    plan["rehearsal"] = {"visits": visits}
    return plan


@contextlib.contextmanager
def started(*words: str, env: Mapping[str, str]) -> Iterator[subprocess.Popen[str]]:
    """Start a command in a process of its own, which ends with the block at the latest."""
    whole = [sys.executable, "-m", "fieldapp.cli", *words]
    pipes = {"stdin": subprocess.DEVNULL, "stdout": subprocess.PIPE, "stderr": subprocess.PIPE}
    with subprocess.Popen(whole, env=env, text=True, **pipes) as process:  # type: ignore[call-overload]
        try:
            yield process
        finally:
            if process.poll() is None:
                process.kill()


def counts(**given: int) -> dict[str, int]:
    """Return the counts of bottles, nought where none is named."""
    return {name: given.get(name, 0) for name in walks.COUNTS}


def compliance_levels(plan: Plan, analyte: str, in_ug: float) -> list[float]:
    """Return the levels of the compliance first draws in µg/L, a non-detect as zero.

    Source: the rule document us-2020, ``[counts]`` and ``[nondetects]``.
    """
    drawn = {
        (visit["id"], draw["draw"])
        for route in plan["routes"]
        for visit in route["visits"]
        for draw in visit["draws"]
        if draw["purpose"] == "compliance" and draw["draw"] == 1
    }
    return [
        0.0 if given["value"].startswith("<") else float(given["value"]) * in_ug
        for given in plan["rehearsal"]["results"]
        if (given["visit"], given["draw"]) in drawn and given["analyte"] == analyte
    ]


def on_two_tablets(plan: Plan) -> None:
    """Give the last two visits to a second sampler, on two days."""
    plan["people"].append({"id": "sampler-2", "roles": ["sampler"], "name": "Corvane Ashpettle"})
    (route,) = plan["routes"]
    first, second, third = route["visits"]
    route["visits"] = [first]
    for name, day, visit in (("R-0505", "2027-05-04", second), ("R-0506", "2027-05-06", third)):
        plan["routes"].append({
            "id": name, "title": name, "day": day, "sampler": "sampler-2", "visits": [visit],
        })  # fmt: skip


def in_the_night_of_march(plan: Plan) -> None:
    """Move the round to the night of 13 to 14 March 2027, an early visit."""
    plan["round"].update({"from": "2027-03-01", "to": "2027-03-31", "months": [3]})
    plan["routes"][0]["day"] = "2027-03-14"
    plan["rehearsal"]["begins"] = "04:15"
    script = walks.script_of(plan, "V-0401")
    script["arrives"] = "04:30"
    script["last_use"] = {"at": "22:00", "exact": "at", "where": "bath"}


def pairs_for_compliance(plan: Plan) -> None:
    """Ask for both litres of the pair at two sites with lead lines, under the 2024 rule."""
    plan["round"].update({"rule": "us-2024"})
    for visit in plan["routes"][0]["visits"]:
        visit["protocol"] = "first-and-fifth"
        visit["draws"] = [{"draw": n, "purpose": "compliance"} for n in (1, 5)]
    results = plan["rehearsal"]["results"]
    next(r for r in results if (r["visit"], r["analyte"]) == ("V-0403", "lead"))["value"] = "8"
    results.append({"visit": "V-0403", "draw": 5, "analyte": "lead", "value": "2.1"})


def bytes_of(folder: Path) -> dict[str, bytes]:
    """Return every file of a folder with its bytes."""
    return {
        str(path.relative_to(folder)): path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def one_column(database: Path, asked: str, *values: Any) -> list[Any]:
    """Return the first column of what a closed database answers."""
    return [row[0] for row in rows(database, asked, *values)]


def rows(database: Path, asked: str, *values: Any) -> list[tuple[Any, ...]]:
    """Return what a closed database answers, and change no byte of it."""
    uri = f"{database.resolve().as_uri()}?mode=ro&immutable=1"
    with contextlib.closing(sqlite3.connect(uri, uri=True)) as db:
        return list(db.execute(asked, values))
