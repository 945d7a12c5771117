"""A visit that was begun keeps its plan though the round drops it before its record arrives."""

from fieldapp.domain.facts import BottleSet, EntryWithdrawn, VisitOpened
from fieldapp.identity import new_act


def _act(store, *facts):
    store.act(new_act(), {}, lambda _pages, _reading: list(facts), by="sampler-1")


def test_a_begun_visit_stays_on_the_route_after_it_was_dropped(planned):
    _act(planned, VisitOpened(visit="V-0401"))
    with planned.pages() as pages:
        plan = next(e for e in pages.story("visit:V-0401") if e.fact.kind == "visit.planned")
    _act(planned, EntryWithdrawn(of=plan.hash, reason="no longer in the round"))

    with planned.pages() as pages:
        row = pages.visit("V-0401")
        assert row is not None
        assert row["state"] == "open"
        assert pages.plan("V-0401") == plan.fact


def test_a_dropped_visit_that_nobody_began_is_gone(planned):
    with planned.pages() as pages:
        plan = next(e for e in pages.story("visit:V-0402") if e.fact.kind == "visit.planned")
    _act(planned, EntryWithdrawn(of=plan.hash, reason="no longer in the round"))

    with planned.pages() as pages:
        assert pages.visit("V-0402") is None


def test_the_purpose_at_the_scan_stands_before_the_purpose_at_printing(planned, codes):
    bound = BottleSet(
        visit="V-0401", bottle=codes[0], draw=1, kind_="first-draw", purpose="investigation"
    )
    _act(planned, VisitOpened(visit="V-0401"), bound)

    with planned.pages() as pages:
        assert pages.bottle(codes[0])["purpose"] == "investigation"
