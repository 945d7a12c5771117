"""The house rules that can be seen in the text: who imports whom, and one word a thing."""

import ast
import dataclasses
import importlib
import pkgutil
import re
import string
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

import fieldapp
import sync
from fieldapp import words
from fieldapp.domain import reconcile
from fieldapp.domain.deviations import DEVIATIONS
from fieldapp.domain.errors import RuleBroken
from fieldapp.domain.facts import ALL, CENTRAL, KINDS, ROUTE, ROUTE_LAB, Done
from fieldapp.domain.facts.base import private_fields
from fieldapp.schemas.facts import VOCABULARY, schema_of

HOUSE = Path(__file__).resolve().parents[1]
OURS = ("fieldapp", "sync")
EVERYTHING = frozenset({"*"})

ARROWS: dict[str, frozenset[str]] = {
    # rooms of fieldapp, and what each may import beside itself
    "cli": EVERYTHING,
    "rehearsal": EVERYTHING,
    "running": frozenset({"web", "work", "store", "identity", "sync"}),
    "nodes": frozenset({"store", "projections", "identity", "domain", "sync"}),
    "web": frozenset({
        "work", "commands", "projections", "store", "printing", "reading", "words", "domain",
        "clock", "identity", "places", "photos", "scanning",
    }),
    "web/replication": frozenset({"work", "store", "sync"}),
    "work": frozenset({
        "commands", "projections", "store", "printing", "reading", "words", "domain", "identity",
        "sync",
    }),
    "store": frozenset({
        "schemas", "projections", "clock", "identity", "scopes", "domain", "sync",
    }),
    "scopes": frozenset({"projections", "domain"}),
    "projections": frozenset({"domain"}),
    "commands": frozenset({"projections", "domain"}),
    "reading": frozenset({"domain", "words", "schemas", "places"}),
    "printing": frozenset({"domain", "words"}),
    "schemas": frozenset({"domain"}),
    "words": frozenset({"domain"}),
    "identity": frozenset({"clock", "domain", "sync"}),
    "photos": frozenset({"domain", "sync"}),
    "scanning": frozenset({"photos", "domain"}),
    "clock": frozenset({"domain"}),
    "settings": frozenset(),
    "places": frozenset(),
    "domain": frozenset(),
    "sync": frozenset(),
}  # fmt: skip

OUTSIDE: dict[str, frozenset[str]] = {
    # rooms that may stand on nothing but these of what others wrote
    "domain": frozenset(),
    "domain/plumbing": frozenset({"numpy", "scipy"}),
    "sync": frozenset({"cryptography"}),
    "sync/http": frozenset({"cryptography", "requests"}),
    "commands": frozenset(),
    "words": frozenset(),
    "scopes": frozenset(),
    "clock": frozenset(),
    "photos": frozenset({"PIL"}),
    "places": frozenset(),
    "scanning": frozenset({"PIL", "zxingcpp"}),
    "schemas": frozenset({"marshmallow"}),
    "projections": frozenset({"sqlite_utils"}),
    "store": frozenset(),
}
NO_CLOCK_NO_WEB_NO_DATABASE = frozenset({
    "time", "sqlite3", "http", "urllib", "socket", "random", "threading", "subprocess", "gettext",
})  # fmt: skip
"""Of the standard library, what a rule of the trade never needs."""

AVOIDED = frozenset({
    "event", "events", "status", "statuses", "manager", "managers", "handler", "handlers", "util",
    "utils", "sample", "samples", "submission", "submissions", "project", "projects", "task",
    "tasks",
})  # fmt: skip


def sources() -> Iterator[tuple[str, Path]]:
    """Return every module of ours with its file."""
    for package in OURS:
        for path in sorted((HOUSE / package).rglob("*.py")):
            parts = path.relative_to(HOUSE).with_suffix("").parts
            yield ".".join(parts[:-1] if parts[-1] == "__init__" else parts), path


def imported(module: str, text: str, *, package: bool = False) -> set[str]:
    """Return what a module imports anywhere in its text, inside functions too."""
    found: set[str] = set()
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.Import):
            found |= {one.name for one in node.names}
        if isinstance(node, ast.ImportFrom):
            base = _base(module, node, package)
            found |= {base} if "." in base else {f"{base}.{one.name}" for one in node.names}
        if _loads_by_name(node):
            found.add(node.args[0].value)
    return found


def _base(module: str, node: ast.ImportFrom, package: bool) -> str:
    if not node.level:
        return node.module or ""
    parts = module.split(".")
    above = parts[: len(parts) - node.level + package]
    return ".".join([*above, *([node.module] if node.module else [])])


def _loads_by_name(node: ast.AST) -> bool:
    return (
        isinstance(node, ast.Call)
        and ast.unparse(node.func) in ("__import__", "importlib.import_module", "import_module")
        and bool(node.args)
        and isinstance(node.args[0], ast.Constant)
    )


def room(name: str) -> str:
    """Return the room of a module of ours: ``fieldapp.web.desk`` is in ``web``."""
    parts = name.split(".")
    return parts[0] if parts[0] == "sync" or len(parts) == 1 else parts[1]


def rules_of(module: str, table: dict[str, frozenset[str]]) -> frozenset[str] | None:
    """Return the row for a module: of its own file or folder where there is one, else its room."""
    parts = module.split(".")
    inner = "/".join([room(module), *parts[1 if parts[0] == "sync" else 2 :][:1]])
    return table.get(inner, table.get(room(module)))


def wrong_arrows(module: str, text: str, *, package: bool = False) -> list[str]:
    """Return the imports of a module that point the wrong way."""
    allowed, wrong = rules_of(module, ARROWS), []
    if module in OURS:
        allowed = frozenset() if module == "fieldapp" else ARROWS["sync"]
    if allowed is None:
        return [f"{module}: its room stands in no table"]
    for name in sorted(imported(module, text, package=package)):
        if name.split(".")[0] not in OURS or room(name) == room(module):
            continue
        if "*" not in allowed and room(name) not in allowed:
            wrong.append(f"{module} imports {name}")
    return wrong


def strangers(module: str, text: str, *, package: bool = False) -> list[str]:
    """Return what a module imports of others' work that its room may not stand on."""
    allowed = rules_of(module, OUTSIDE)
    if allowed is None:
        return []
    tops = {name.split(".")[0] for name in imported(module, text, package=package)}
    outside = tops - set(sys.stdlib_module_names) - set(OURS) - allowed
    if room(module) == "domain":
        outside |= tops & NO_CLOCK_NO_WEB_NO_DATABASE
    return [f"{module} stands on {top}" for top in sorted(outside)]


def clock_calls(module: str, text: str) -> list[str]:
    """Return the calls by which a module asks the machine for the time."""
    asked = ("now", "utcnow", "today", "localtime", "gmtime", "time_ns", "monotonic")
    return [
        f"{module}:{node.lineno} {ast.unparse(node.func)}"
        for node in ast.walk(ast.parse(text))
        if isinstance(node, ast.Call)
        and isinstance(node.func, ast.Attribute)
        and node.func.attr in asked
    ]


def avoided_names(module: str, text: str) -> list[str]:
    """Return the modules, classes and functions named with a word that the house avoids."""
    names = [(0, module.split(".")[-1])]
    names += [
        (node.lineno, node.name)
        for node in ast.walk(ast.parse(text))
        if isinstance(node, ast.ClassDef | ast.FunctionDef | ast.AsyncFunctionDef)
    ]
    return [f"{module}:{line} {name}" for line, name in names if _parts(name) & AVOIDED]


def _parts(name: str) -> set[str]:
    return {part.lower() for part in re.findall(r"[A-Z]?[a-z0-9]+|[A-Z]+(?![a-z])", name)}


MODULES = {name: path for name, path in sources()}


def _text(module: str) -> str:
    return MODULES[module].read_text("utf-8")


def _package(module: str) -> bool:
    return MODULES[module].name == "__init__.py"


def test_there_is_something_to_look_at():
    assert {"fieldapp.store", "fieldapp.web.desk", "fieldapp.domain", "sync.http"} <= set(MODULES)
    assert len(MODULES) > 90


@pytest.mark.parametrize("module", MODULES)
def test_import_arrows_point_one_way(module):
    assert wrong_arrows(module, _text(module), package=_package(module)) == []


@pytest.mark.parametrize("module", MODULES)
def test_a_room_stands_only_on_what_it_may(module):
    assert strangers(module, _text(module), package=_package(module)) == []


PLANTED = {
    "at the top": ("fieldapp.domain.stand", "from fieldapp import store"),
    "by its full name": ("fieldapp.commands.bench", "import fieldapp.web.desk as desk"),
    "inside a function": (
        "fieldapp.projections.pages",
        "def f():\n    from fieldapp.commands import bench\n",
    ),
    "inside a method": (
        "fieldapp.schemas.facts",
        "class A:\n    def f(self):\n        import fieldapp.store\n",
    ),
    "by dots": ("fieldapp.domain.rules.model", "from ...store import Store"),
    "by a lone dot": ("fieldapp.domain.stand", "from .. import clock"),
    "only for types": (
        "fieldapp.words.rules",
        "from typing import TYPE_CHECKING\nif TYPE_CHECKING:\n    from fieldapp.web import bench\n",
    ),
    "by a string": ("sync.ledger", "import importlib\nimportlib.import_module('fieldapp.store')"),
    "to the pages' network": ("fieldapp.web.desk", "from sync.http import HttpPeer"),
    "out of the record": ("sync.device", "from fieldapp.identity import new_act"),
    "from a room that nobody listed": ("fieldapp.attic", "import json"),
}


@pytest.mark.parametrize("where", PLANTED)
def test_a_planted_wrong_arrow_is_found(where):
    module, text = PLANTED[where]
    assert wrong_arrows(module, text) != []


PLANTED_STRANGERS = {
    "the web in a rule": ("fieldapp.domain.stand", "from flask import g"),
    "numbers in a rule": ("fieldapp.domain.percentile", "import numpy as np"),
    "a database in a rule": ("fieldapp.domain.bottles", "import sqlite3"),
    "a clock in a rule": ("fieldapp.domain.stand", "from time import monotonic"),
    "requests beside its room": ("sync.device", "import requests"),
    "the web in a command": ("fieldapp.commands.kitchen", "def f():\n    import flask\n"),
}


@pytest.mark.parametrize("what", PLANTED_STRANGERS)
def test_a_planted_stranger_is_found(what):
    module, text = PLANTED_STRANGERS[what]
    assert strangers(module, text) != []


def test_what_a_room_may_stand_on_is_let_through():
    assert strangers("sync.http", "import requests\nfrom cryptography.x509 import load") == []
    assert strangers("fieldapp.domain.plumbing.apportion", "import numpy, scipy.optimize") == []
    assert wrong_arrows("fieldapp.web.replication", "from sync.endpoint import Endpoint") == []


@pytest.mark.parametrize(
    "module", [m for m in MODULES if room(m) in ("domain", "commands", "projections", "scopes")]
)
def test_no_rule_asks_the_machine_for_the_time(module):
    assert clock_calls(module, _text(module)) == []


@pytest.mark.parametrize("call", ["datetime.now(UTC)", "date.today()", "time.monotonic()"])
def test_a_planted_look_at_the_clock_is_found(call):
    assert clock_calls("fieldapp.domain.stand", f"def f():\n    return {call}\n") != []


@pytest.mark.parametrize("module", MODULES)
def test_no_name_is_one_that_the_house_avoids(module):
    assert avoided_names(module, _text(module)) == []


@pytest.mark.parametrize("name", ["SampleForm", "event_bus", "utils", "TaskManager", "get_status"])
def test_a_planted_avoided_name_is_found(name):
    assert avoided_names("sync.x", f"class {name}: pass") != []
    assert avoided_names(f"fieldapp.{name}", "") != []


@pytest.mark.parametrize("name", ["sampler", "Sampling", "projections", "eventual", "Statement"])
def test_a_word_that_only_begins_alike_is_let_through(name):
    assert avoided_names("sync.x", f"def {name}(): pass") == []


# one word a thing

SHAPE = re.compile(r"[a-z]+\.[a-z]+(-[a-z]+)*\Z")
IRREGULAR = frozenset({"left", "kept", "set", "given", "taken", "drawn", "withdrawn", "sent"})
REACHES = (ALL, ROUTE, ROUTE_LAB, CENTRAL)
PLACES = ("ledger", "plan", "kitchen", "custody", "bench", "desk")
DEVELOPERS = (HOUSE / "DEVELOPERS.md").read_text("utf-8")
ROWS = {
    kind: row
    for row in DEVELOPERS.splitlines()
    if row.startswith("| `")
    for kind in re.findall(r"`([a-z]+\.[a-z-]+)`", row.split("|")[1])
}


@pytest.mark.parametrize("kind", KINDS)
def test_a_kind_is_dotted_and_past(kind):
    assert SHAPE.match(kind)
    verb = kind.partition(".")[2]
    assert verb in IRREGULAR or verb.endswith("ed")


@pytest.mark.parametrize("kind", KINDS)
def test_a_kind_has_a_reach_a_place_and_a_schema_for_each_of_its_fields(kind):
    cls = KINDS[kind]
    assert cls.reach in REACHES
    assert cls.place in PLACES
    wanted = {field.name.rstrip("_") for field in dataclasses.fields(cls)}
    assert set(schema_of(kind).fields) == wanted


@pytest.mark.parametrize("kind", KINDS)
def test_a_kind_is_documented_with_every_field_and_its_private_ones_marked(kind):
    assert kind in ROWS, f"{kind} has no row in DEVELOPERS.md"
    row = ROWS[kind]
    if "the same fields" in row:
        return
    cls = KINDS[kind]
    common = {field.name for field in dataclasses.fields(Done)} if issubclass(cls, Done) else set()
    for field in dataclasses.fields(cls):
        name = field.name.rstrip("_")
        if field.name in common:
            continue
        mark = "°" if field.name in private_fields(cls) else ""
        assert re.search(rf"\b{name}{mark}(?!\w|°)", row), f"{kind}: {name}{mark}"


def test_the_documents_name_no_kind_that_is_not_there():
    assert set(ROWS) - set(KINDS) == set()


def test_every_word_list_belongs_to_a_field_that_is_there():
    for kind, key in VOCABULARY:
        assert key in schema_of(kind).fields, (kind, key)


def every_module() -> None:
    """Load all modules, so that every rule has been declared."""
    for package in (fieldapp, sync):
        for found in pkgutil.walk_packages(package.__path__, f"{package.__name__}."):
            importlib.import_module(found.name)


def broken_rules() -> dict[str, type[RuleBroken]]:
    """Return every class of broken rule by its kind."""
    every_module()
    found, todo = {RuleBroken.kind: RuleBroken}, [RuleBroken]
    while todo:
        todo += (below := todo.pop().__subclasses__())
        # a class of a test is none of the house's
        found |= {cls.kind: cls for cls in below if cls.__module__.startswith(OURS)}
    return found


BROKEN = broken_rules()


@pytest.mark.parametrize("kind", BROKEN)
def test_every_rule_has_its_sentence(kind):
    assert kind in words.RULES


@pytest.mark.parametrize("kind", DEVIATIONS)
def test_every_deviation_has_its_sentence_bias_and_source(kind):
    assert kind in words.DEVIATIONS
    assert DEVIATIONS[kind].bias in ("low", "high", "either")
    assert DEVIATIONS[kind].source


@pytest.mark.parametrize("kind", reconcile.FINDINGS)
def test_every_finding_has_its_sentence(kind):
    assert kind in words.FINDINGS


def made_findings() -> set[str]:
    """Return the kinds of finding that the rules make, read from their text."""
    calls = [
        node
        for module in MODULES
        if room(module) == "domain"
        for node in ast.walk(ast.parse(_text(module)))
        if isinstance(node, ast.Call) and ast.unparse(node.func).split(".")[-1] == "Finding"
    ]
    first = [call.args[0] for call in calls if call.args]
    return {one.value for one in first if isinstance(one, ast.Constant)}


def test_every_finding_that_is_made_is_listed():
    assert made_findings() <= set(reconcile.FINDINGS)
    assert len(made_findings()) >= 10


def test_no_sentence_is_left_without_its_kind():
    variants = {kind for kind in words.RULES if kind not in BROKEN}
    assert {v for v in variants if not any(v.startswith(f"{kind}-") for kind in BROKEN)} == set()
    assert set(words.DEVIATIONS) == set(DEVIATIONS)
    assert set(words.FINDINGS) == set(reconcile.FINDINGS)


SENTENCES = [
    (table, kind) for table in ("RULES", "DEVIATIONS", "FINDINGS") for kind in getattr(words, table)
]


@pytest.mark.parametrize(("table", "kind"), SENTENCES)
def test_a_sentence_can_be_said_with_whatever_is_known(table, kind):
    sentence = getattr(words, table)[kind]
    said = words.say(getattr(words, table), kind, {})
    assert said[0].isupper() or sentence[0] == "{"
    assert "{" not in said
    assert not _parts(said) & AVOIDED
    if table != "DEVIATIONS":
        assert sentence[-1] in ".?}"


@pytest.mark.parametrize(("table", "kind"), SENTENCES)
def test_no_sentence_calls_water_safe(table, kind):
    assert not re.search(r"\bsafe(ly|ty)?\b", getattr(words, table)[kind], re.IGNORECASE)


def raised() -> list[tuple[str, str, set[str]]]:
    """Return each place where a rule is raised by keywords: where, which kind, which values."""
    by_name = {cls.__name__: kind for kind, cls in BROKEN.items()}
    found = []
    for module in MODULES:
        for node in ast.walk(ast.parse(_text(module))):
            name = ast.unparse(node.func).split(".")[-1] if isinstance(node, ast.Call) else ""
            if name in by_name and not any(k.arg is None for k in node.keywords) and not node.args:
                given = {str(keyword.arg) for keyword in node.keywords}
                found.append((f"{module}:{node.lineno}", by_name[name], given))
    return found


RAISED = raised()


@pytest.mark.parametrize(("where", "kind", "given"), RAISED, ids=[where for where, *_ in RAISED])
def test_a_rule_brings_every_value_that_its_sentence_names(where, kind, given):
    named = {name for _, name, *_ in string.Formatter().parse(words.RULES[kind]) if name}
    if "why" in given and any(variant.startswith(f"{kind}-") for variant in words.RULES):
        return  # its own sentence for each why is said instead
    assert named <= given
