"""Days on which one thing goes wrong, shipped with the program: each is found, and nothing else."""

from typing import Any

import pytest

from fieldapp.places import shipped
from tests.journeys import walks

PLANTED: dict[str, tuple[str, str, dict[str, int]]] = {
    "day-left-behind": (
        "filled-not-received",
        "left behind",
        {"issued": 5, "filled": 5, "received": 4, "to_analyse": 5, "resulted": 4},
    ),
    "day-swapped": (
        "bottles-swapped",
        "changed places",
        {"issued": 3, "filled": 3, "received": 3, "to_analyse": 3, "resulted": 3},
    ),
    "day-short-stand": (
        "stand-too-short",
        "5 h 10",
        {"issued": 4, "filled": 4, "received": 4, "to_analyse": 4, "resulted": 4},
    ),
    "day-wrong-seal": (
        "seal-differs",
        "88 214; the laboratory read 88 241, whole",
        {"issued": 4, "filled": 4, "received": 4, "to_analyse": 4, "resulted": 4},
    ),
}
"""By file: the finding that it yields, words of its sentence, and the bottles at central."""


@pytest.mark.parametrize("name", sorted(PLANTED))
def test_what_was_planted_is_the_one_finding(name: str) -> None:
    kind, says, bottles = PLANTED[name]
    walked = walks.rehearse(shipped("demo_routes") / f"{name}.json")
    assert walked.code == 1
    assert walked.kinds == [kind], walked.account["findings"]
    (finding,) = walked.account["findings"]
    assert says in finding["says"]
    assert walked.bottles == {**dict.fromkeys(walks.COUNTS, 0), **bottles}
    assert walked.account["chain"] == "intact"


def test_every_shipped_day_is_walked_by_some_test() -> None:
    walked = {*PLANTED, "clean-day", "demo-town", "demo-town-before"}
    assert {file.stem for file in shipped("demo_routes").glob("*.json")} == walked


def test_todays_route_of_the_demo_ends_with_nothing_open() -> None:
    walked = walks.rehearse(shipped("demo_routes") / "demo-town.json")
    account: dict[str, Any] = walked.account
    assert (walked.code, account["findings"], account["photos"]) == (0, [], 1)
