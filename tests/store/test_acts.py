"""One act, one set of entries: what a press becomes, and what it can never become."""

import dataclasses
import threading
import typing
from collections.abc import Mapping

import pytest

from fieldapp.domain import facts
from fieldapp.domain.decision import Decision
from fieldapp.domain.errors import NotDue, RuleBroken
from fieldapp.domain.facts import KINDS
from fieldapp.schemas.facts import UnwritableFact
from fieldapp.scopes import scope_of
from fieldapp.store import ActDiffers
from sync.entry import verify
from sync.errors import Unwritable
from tests import nodes
from tests.nodes import LABORATORY, ROUND, ROUTE, bodies, count, press

ACT = "01980000-0000-7000-8000-000000000001"
VISIT, SITE = "V-0401", "Q-0412"

ON_THE_ROUTE = [f"route:{ROUTE}"]
AND_AT_THE_LABORATORY = [f"route:{ROUTE}", f"lab:{LABORATORY}"]
EVERYBODY, CENTRAL_ALONE = ["all"], []

REACH = {
    # design 5: rounds, protocols, persons, devices and the logs themselves
    **dict.fromkeys(
        ("log.opened", "round.opened", "round.changed",
         "protocol.kept", "person.listed", "device.enrolled", "device.granted"),
        EVERYBODY,
    ),
    # what a route needs or yields, and no laboratory
    **dict.fromkeys(
        ("site.listed", "site.dropped", "route.planned", "visit.opened", "visit.left",
         "visit.resumed", "occupant.agreed", "visit.signed", "photo.taken"),
        ON_THE_ROUTE,
    ),
    # what a laboratory has to know of a bottle before it pours
    **dict.fromkeys(
        ("visit.planned", "bottle.issued", "labels.printed", "bottle.voided", "water.used",
         "question.answered", "stand.started", "run.started", "run.ended", "bottle.set",
         "tap.opened", "tap.closed", "bottle.filled", "draw.poured", "deviation.stated",
         "visit.closed", "bottle.received", "analysis.decided", "crate.counted",
         "bottle.located", "bottle.packed", "cooler.sealed", "cooler.reopened", "cooler.opened",
         "handover.offered", "handover.stated", "receipt.stated"),
        AND_AT_THE_LABORATORY,
    ),
    # answers, settlements, results, clocks: of central alone; what is carried goes by its own words
    **dict.fromkeys(
        ("results.learned", "result.reported", "finding.settled", "clock.checked", "log.carried"),
        CENTRAL_ALONE,
    ),
    # these go where the entry went that they answer: see the test below
    "entry.corrected": None,
    "entry.withdrawn": None,
}  # fmt: skip


def one_of(kind: str, code: str) -> facts.Fact:
    """Return a fact of that kind about the shipped route, with something in each field it needs."""
    cls = KINDS[kind]
    hints = typing.get_type_hints(cls)
    known = {
        "round": ROUND, "route": ROUTE, "visit": VISIT, "site": SITE, "bottle": code,
        "laboratory": LABORATORY, "cooler": "C-1",
    }  # fmt: skip
    given: dict[str, object] = {}
    for field in dataclasses.fields(cls):
        if field.name in known:
            given[field.name] = known[field.name]
        elif field.default is dataclasses.MISSING:
            given[field.name] = _something(hints[field.name])
    return cls(**given)


def _something(hint: object) -> object:
    origin = typing.get_origin(hint)
    if origin is tuple:
        return ()
    if origin is Mapping:
        return {}
    return {int: 1, bool: True}.get(hint, "x")


def test_one_press_is_one_set_of_entries_under_one_act(planned, codes):
    before = count(planned)
    answer = press(
        planned,
        facts.TapClosed(visit=VISIT, draws=(1,)),
        facts.BottleFilled(visit=VISIT, bottle=codes[0], draw=1, fill="line"),
        act=ACT,
    )
    made = [body for body in bodies(planned) if body["id"] == ACT]
    assert [body["kind"] for body in made] == ["tap.closed", "bottle.filled"]
    assert count(planned) == before + 2
    assert len(answer.entries) == 2
    assert {body["by"] for body in made} == {"sampler-1"}


def test_the_same_press_again_gets_the_first_answer_and_writes_nothing(planned):
    def decide(pages, reading):
        return Decision([facts.VisitOpened(visit=VISIT)], {"next": f"/{count(planned)}"})

    first = planned.act(ACT, {"visit": VISIT}, decide, by="sampler-1")
    before = count(planned)
    again = planned.act(ACT, {"visit": VISIT}, decide, by="sampler-1")
    assert (again.answer, again.entries) == (first.answer, first.entries)
    assert (first.again, again.again) == (False, True)
    assert count(planned) == before


def test_a_press_that_recorded_nothing_is_remembered_too(planned):
    first = planned.act(ACT, {"n": 1}, lambda *_: Decision([], {"said": "in"}), by="clerk-1")
    again = planned.act(ACT, {"n": 1}, lambda *_: pytest.fail("decided twice"), by="clerk-1")
    assert again.answer == first.answer == {"said": "in"}


def test_the_same_act_with_other_fields_is_refused_and_says_when_it_was_recorded(planned, clock):
    press(planned, facts.VisitOpened(visit=VISIT), act=ACT, fields={"fill": "line"})
    before = count(planned)
    clock.wait(minutes=3)
    with pytest.raises(ActDiffers) as refused:
        press(planned, facts.VisitOpened(visit=VISIT), act=ACT, fields={"fill": "below"})
    assert refused.value.values["at"] == "2027-05-04T11:40:00.000Z"
    assert count(planned) == before


def test_a_press_without_entries_repeated_with_other_fields_is_refused_with_a_time(planned):
    planned.act(ACT, {"n": 1}, lambda *_: [], by="clerk-1")
    with pytest.raises(ActDiffers) as refused:
        planned.act(ACT, {"n": 2}, lambda *_: [], by="clerk-1")
    assert refused.value.values["at"] == "2027-05-04T11:40:00.000Z"


@pytest.mark.parametrize("fault", [NotDue(due="fill"), RuleBroken(), ZeroDivisionError()])
def test_a_rule_that_stands_against_a_press_leaves_nothing(planned, fault):
    before, tables = count(planned), nodes.everything(planned)

    def decide(pages, reading):
        # a decision is asked inside the transaction: what it wrote must go with it
        planned._db.execute("INSERT INTO here VALUES ('trace', '1')")
        raise fault

    with pytest.raises(type(fault)):
        planned.act(ACT, {}, decide, by="sampler-1")
    assert (count(planned), nodes.everything(planned), planned.get("trace")) == (before, tables, "")
    press(planned, facts.VisitOpened(visit=VISIT), act=ACT)
    assert count(planned) == before + 1


def test_when_the_second_fact_cannot_be_written_the_first_is_not_there_either(planned, codes):
    before, tables = count(planned), nodes.everything(planned)
    with pytest.raises(UnwritableFact):
        press(
            planned,
            facts.TapClosed(visit=VISIT, draws=(1,)),
            facts.BottleFilled(visit=VISIT, bottle=codes[0], draw=1, fill="full"),
        )
    assert (count(planned), nodes.everything(planned)) == (before, tables)


def test_a_decision_sees_what_the_press_before_it_recorded(planned):
    press(planned, facts.VisitOpened(visit=VISIT))
    seen = []
    planned.act(
        ACT, {}, lambda pages, _: seen.append(pages.visit(VISIT)["state"]) or [], by="sampler-1"
    )
    assert seen == ["open"]


def test_ten_threads_that_post_one_press_at_once_make_one_entry(planned):
    before, ready = count(planned), threading.Barrier(10)
    answers: list[object] = []

    def post():
        ready.wait()
        answers.append(press(planned, facts.VisitOpened(visit=VISIT), act=ACT, fields={"a": "1"}))

    threads = [threading.Thread(target=post) for _ in range(10)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert count(planned) == before + 1
    assert len({answer.entries for answer in answers}) == 1
    assert sorted(answer.again for answer in answers) == [False] + [True] * 9


WRONG = {
    "a word that is none of the trade's": ("bottle.filled", {"fill": "full"}),
    "no code": ("bottle.filled", {"bottle": "LABEL-1"}),
    "a float": ("bottle.filled", {"volume_ml": 999.5}),
    "a float inside": ("visit.planned", {"answers": {"flow": 1.5}}),
    "a float in a list": ("visit.planned", {"draws": ({"draw": 1.0},)}),
    "yes for a number": ("bottle.filled", {"volume_ml": True}),
    "a number for yes": ("analysis.decided", {"analyse": 1}),
    "local time": ("bottle.filled", {"done_at": "2027-05-04T06:31"}),
    "a number with a comma": ("result.reported", {"value": "3,2"}),
    "another unit": ("result.reported", {"unit": "ppb"}),
    "another basis": ("visit.opened", {"basis": "guessed"}),
    "another qualifier": ("result.reported", {"qualifier": ">"}),
    "not an ISO day": ("route.planned", {"day": "4 May"}),
    "another outcome": ("bottle.received", {"outcome": "in"}),
}


@pytest.mark.parametrize("what", WRONG)
def test_a_fact_that_does_not_fit_is_refused_before_it_is_signed(planned, codes, what):
    kind, change = WRONG[what]
    good = right(kind, codes[0])
    press(planned, good)
    before = count(planned)
    with pytest.raises((UnwritableFact, Unwritable)):
        press(planned, dataclasses.replace(good, **change))
    assert count(planned) == before


def right(kind: str, code: str) -> facts.Fact:
    """Return a fact that fits its schema."""
    fitting = {
        "bottle.filled": {"fill": "line"},
        "result.reported": {"value": "3.2", "unit": "ug/L"},
        "route.planned": {"day": "2027-05-04"},
        "bottle.received": {"outcome": "accepted"},
    }
    return dataclasses.replace(one_of(kind, code), **fitting.get(kind, {}))


def test_a_field_that_the_kind_does_not_have_is_refused(planned):
    before = count(planned)
    with pytest.raises(UnwritableFact, match="mood"):
        press(planned, Strange(visit=VISIT))
    assert count(planned) == before


class Strange(facts.VisitOpened):
    """A fact of a known kind that says more than its kind may."""

    def data(self):
        """Return the visit, and a mood."""
        return {"visit": self.visit, "mood": "sunny"}


def test_every_kind_of_fact_has_its_reach_in_this_table():
    assert set(REACH) == set(KINDS)


@pytest.mark.parametrize("kind", [kind for kind, reach in REACH.items() if reach is not None])
def test_a_fact_goes_where_its_kind_may_go_and_nowhere_else(planned, codes, kind):
    press(planned, facts.BottlePacked(bottle=codes[0], cooler="C-1", route=ROUTE))
    with planned.pages() as pages:
        assert scope_of(pages, one_of(kind, codes[0])) == REACH[kind]


ANSWERED = [
    (facts.VisitOpened(visit=VISIT), ON_THE_ROUTE),
    (facts.StandStarted(visit=VISIT), AND_AT_THE_LABORATORY),
    (facts.PersonListed(person="p", roles=("clerk",)), EVERYBODY),
    (facts.ResultsLearned(way="call", learned_at="2027-05-04T11:40:00.000Z"), CENTRAL_ALONE),
]


@pytest.mark.parametrize(("fact", "reach"), ANSWERED, ids=[fact.kind for fact, _ in ANSWERED])
@pytest.mark.parametrize("how", ["corrected", "withdrawn"])
def test_a_correction_and_a_withdrawal_go_where_the_entry_went(planned, fact, reach, how):
    (of,) = press(planned, fact).entries
    answer = facts.EntryWithdrawn(of=of)
    if how == "corrected":
        answer = facts.EntryCorrected(of=of, kind_=fact.kind, data_=fact.data())
    press(planned, answer, act=ACT)
    assert [body["scope"] for body in bodies(planned) if body["id"] == ACT] == [reach]


def test_a_spare_reaches_its_route_and_laboratory_before_it_is_bound(planned, codes):
    spare = next(body for body in bodies(planned) if body["data"].get("bottle") == codes[-1])
    assert spare["kind"] == "bottle.issued"
    assert "visit" not in spare["data"]
    assert spare["scope"] == AND_AT_THE_LABORATORY


def test_no_name_address_or_note_is_in_a_signed_body(pair):
    nodes.work_a_day(pair)
    hidden = [*nodes.private_words(), "Wilhelmet Asterby", "looked again", "wrong sticker", "seen"]
    assert len(hidden) > 20
    for store in (pair.central, pair.tablet):
        with store.reader() as db:
            signed = b"\n".join(
                bytes(row[0])
                for row in db.execute("SELECT body FROM entry UNION SELECT body FROM borrowed")
            ).decode()
            kept = b"\n".join(bytes(r[0]) for r in db.execute("SELECT p FROM private")).decode()
        assert [word for word in hidden if word in signed] == []
        assert "Wilhelmet Asterby" in kept


def test_the_private_part_is_salted_so_that_equal_names_do_not_show(planned):
    named = facts.OccupantAgreed(visit=VISIT, how="spoken", name="Fenna Drizzlecot")
    press(planned, named, act=ACT)
    press(planned, named)
    labels = [b["priv"]["h"] for b in bodies(planned) if b["kind"] == "occupant.agreed"]
    assert len(set(labels)) == 2


def test_an_entry_is_signed_by_this_node_and_says_who_when_and_by_which_clock(planned, clock):
    clock.wait(minutes=1)
    press(planned, facts.VisitOpened(visit=VISIT), act=ACT)
    with planned.reader() as db:
        log = planned.current_log(db)
        entry = nodes.last_entry(db, log)
    fields = verify(planned.realm, entry, planned.key.public)
    assert fields["at"] == "2027-05-04T11:41:00.000Z"
    assert (fields["off"], fields["mono"], fields["boot"]) == (-360, 5_060_000, "boot-1")
    assert (fields["by"], fields["auth"], fields["dev"]) == ("sampler-1", "none", planned.dev)


def test_a_correction_names_the_entry_it_answers(planned):
    (of,) = press(planned, facts.VisitOpened(visit=VISIT)).entries
    press(planned, facts.EntryWithdrawn(of=of), act=ACT)
    assert [b["refs"] for b in bodies(planned) if b["id"] == ACT] == [[of]]
