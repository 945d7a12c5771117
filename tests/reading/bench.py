"""A small round to break, and the shipped one."""

import copy
import json
import string
from typing import Any

import pytest

from fieldapp.places import shipped
from fieldapp.reading import BadFile, FileFault, RoundFile, read_round
from fieldapp.reading.faults import SENTENCES

NAME = "spring.json"

SMALL: dict[str, Any] = {
    "round": {
        "id": "thornmere-1",
        "title": "Thornmere (invented)",
        "rule": "us-2020",
        "convention": "interpolate",
        "zone": "America/Boise",
        "from": "2027-05-01",
        "to": "2027-05-31",
        "months": [5],
        "laboratory": {"id": "lab-1", "title": "Laboratory One (invented)"},
        "due": "PT48H",
    },
    "people": [
        {"id": "sampler-1", "roles": ["sampler"], "name": "Wanda Whistlecomb"},
        {"id": "clerk-1", "roles": ["clerk"], "name": "Bertil Oddspoon"},
    ],
    "sites": [
        {
            "id": "T-1",
            "tap": "kitchen",
            "tier": "1",
            "line": "lead",
            "plumbing": "copper",
            "name": "Gwendra Moonpail",
            "address": "5 Crumblebee Way",
        },
        {"id": "T-2", "tap": "kitchen", "tier": "none", "line": "plastic", "plumbing": "plastic"},
    ],
    "routes": [
        {
            "id": "R-1",
            "title": "Tuesday",
            "day": "2027-05-04",
            "sampler": "sampler-1",
            "visits": [
                {
                    "id": "V-1",
                    "site": "T-1",
                    "protocol": "first-and-fifth",
                    "draws": [
                        {"draw": 1, "purpose": "compliance"},
                        {"draw": 5, "purpose": "investigation"},
                    ],
                },
                {
                    "id": "V-2",
                    "site": "T-2",
                    "protocol": "first-litre",
                    "draws": [
                        {"draw": 1, "purpose": "request"},
                        {"draw": 2, "kind": "blank", "purpose": "blank"},
                    ],
                },
            ],
        }
    ],
}

GONE = object()


def small() -> dict[str, Any]:
    """Return the small round, to be changed as a test likes."""
    return copy.deepcopy(SMALL)


def put(plan: Any, path: str, value: Any) -> None:
    """Put a value at ``routes.0.visits.1.site``; ``GONE`` takes the key away."""
    *way, last = [int(key) if key.isdigit() else key for key in path.split(".")]
    for key in way:
        plan = plan[key]
    if value is GONE:
        del plan[last]
    else:
        plan[last] = value


def read(plan: Any) -> RoundFile:
    """Read a plan as the file that it would be."""
    return read_round(json.dumps(plan).encode(), NAME)


def assert_whole(fault: FileFault) -> None:
    """Hold that a fault is one printable line whose sentence lacks no value."""
    wanted = {name for _, name, _, _ in string.Formatter().parse(SENTENCES[fault.kind]) if name}
    assert wanted <= {"value", *fault.values}, fault
    assert fault.says.endswith(".")
    assert fault.line.isprintable()


def faults_of(data: bytes, name: str = NAME) -> set[tuple[str, str]]:
    """Return kind and path of every fault of a file that must be refused."""
    with pytest.raises(BadFile) as bad:
        read_round(data, name)
    assert {fault.file for fault in bad.value.faults} == {name}
    return {(fault.kind, fault.path) for fault in bad.value.faults}


def clean_day() -> bytes:
    """Return the shipped clean day as it lies on disk."""
    return (shipped("demo_routes") / "clean-day.json").read_bytes()
