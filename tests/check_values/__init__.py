"""Published and computed values that the program must reproduce, each with where it is from.

A file holds a list of ``[[value]]`` tables. Each names its ``issuer``, its ``section`` and how it
was ``obtained``; the keys beside these are the file's own. Numbers are texts, read as Decimal by
the tests, so that no binary fraction comes between.
"""

import tomllib
from pathlib import Path
from typing import Any

FOLDER = Path(__file__).parent
ORIGIN = ("issuer", "section", "obtained")


def values(name: str) -> list[dict[str, Any]]:
    """Return the values of ``name.toml``; a value that does not say where it is from is an error.

    Raises:
        ValueError: No values at all, or one without its origin or its own short ``name``.
    """
    found: list[dict[str, Any]] = tomllib.loads((FOLDER / f"{name}.toml").read_text("utf-8"))[
        "value"
    ]
    for number, value in enumerate(found, start=1):
        for key in ("name", *ORIGIN):
            if not str(value.get(key, "")).strip():
                raise ValueError(f"{name}.toml, value {number}: {key} is missing")
    if not found:
        raise ValueError(f"{name}.toml holds no value")
    return found


def named(value: dict[str, Any]) -> str:
    """Return the short name under which a value's test runs."""
    return str(value["name"])
