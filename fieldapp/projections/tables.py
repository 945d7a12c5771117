"""The page tables. All begin with ``p_`` and hold nothing that the ledger does not.

``p_fact`` is the fact table of every kind: one row an entry, only growing. ``p_about`` indexes it
by subject, ``p_gone`` lists what was replaced or withdrawn. The others hold one summary row a
subject, recomputed from its facts in the transaction that wrote them, never patched. All can be
dropped and rebuilt.
"""

import sqlite3

VERSION = 3
"""Raise it when a summary changes; a node with older page tables rebuilds them at start."""

TEXT, INT, BLOB = str, int, bytes

TABLES: dict[str, tuple[dict[str, type], str | tuple[str, ...]]] = {
    "p_fact": (
        {
            "hash": TEXT,
            "kind": TEXT,
            "log": TEXT,
            "seq": INT,
            "at": TEXT,
            "off": INT,
            "mono": INT,
            "boot": TEXT,
            "by": TEXT,
            "act": TEXT,
            "replaces": TEXT,
            "data": TEXT,
            "priv": BLOB,
        },
        "hash",
    ),
    "p_about": ({"subject": TEXT, "hash": TEXT}, ("subject", "hash")),
    "p_gone": ({"hash": TEXT, "by_hash": TEXT, "how": TEXT}, ("hash", "by_hash")),
    "p_unread": ({"hash": TEXT, "kind": TEXT, "log": TEXT, "seq": INT, "says": TEXT}, "hash"),
    "p_round": (
        {
            "round": TEXT,
            "title": TEXT,
            "rule": TEXT,
            "convention": TEXT,
            "convention_by": TEXT,
            "zone": TEXT,
            "from_day": TEXT,
            "to_day": TEXT,
            "months": TEXT,
            "laboratory": TEXT,
            "laboratory_title": TEXT,
            "due": TEXT,
            "keep_poured": INT,
            "protocols": TEXT,
        },
        "round",
    ),
    "p_protocol": ({"sha256": TEXT, "protocol": TEXT, "toml": TEXT}, "sha256"),
    "p_person": ({"person": TEXT, "roles": TEXT, "hash": TEXT, "priv": BLOB}, "person"),
    "p_device": (
        {
            "dev": TEXT,
            "key": TEXT,
            "public_key": TEXT,
            "places": TEXT,
            "person": TEXT,
            "laboratory": TEXT,
        },
        ("dev", "key"),
    ),
    "p_grant": ({"dev": TEXT, "scope": TEXT}, ("dev", "scope")),
    "p_route": (
        {"route": TEXT, "round": TEXT, "title": TEXT, "day": TEXT, "sampler": TEXT},
        "route",
    ),
    "p_site": (
        {
            "site": TEXT,
            "round": TEXT,
            "tap": TEXT,
            "tier": TEXT,
            "line": TEXT,
            "plumbing": TEXT,
            "dropped": INT,
            "hash": TEXT,
            "priv": BLOB,
        },
        ("round", "site"),
    ),
    "p_visit": (
        {
            "visit": TEXT,
            "round": TEXT,
            "route": TEXT,
            "site": TEXT,
            "tap": TEXT,
            "protocol": TEXT,
            "sha256": TEXT,
            "position": INT,
            "state": TEXT,
            "due": TEXT,
            "number": INT,
            "of": INT,
            "stand_basis": TEXT,
            "stand_shortest_s": INT,
            "stand_longest_s": INT,
            "stand_verdict": TEXT,
            "earliest_draw": TEXT,
            "deviations": TEXT,
            "outcome": TEXT,
            "opened_at": TEXT,
            "closed_at": TEXT,
            "touched": INT,
            "log": TEXT,
        },
        "visit",
    ),
    "p_bottle": (
        {
            "bottle": TEXT,
            "round": TEXT,
            "route": TEXT,
            "visit": TEXT,
            "site": TEXT,
            "printed_for": TEXT,
            "draw": INT,
            "kind": TEXT,
            "purpose": TEXT,
            "volume_ml": INT,
            "analyse": TEXT,
            "preservative": TEXT,
            "issued": INT,
            "voided": TEXT,
            "spare": INT,
            "printed": INT,
            "set_at": TEXT,
            "filled_at": TEXT,
            "filled": INT,
            "fill": TEXT,
            "received_at": TEXT,
            "outcome": TEXT,
            "laboratory_number": TEXT,
            "decided": TEXT,
            "results": TEXT,
            "resulted": INT,
            "to_analyse": INT,
            "cooler": TEXT,
            "located": TEXT,
            "receipt_basis": TEXT,
        },
        "bottle",
    ),
    "p_cooler": (
        {
            "cooler": TEXT,
            "round": TEXT,
            "route": TEXT,
            "day": TEXT,
            "box": TEXT,
            "state": TEXT,
            "seals": TEXT,
            "broken": TEXT,
            "bottles": TEXT,
            "packed": INT,
            "count": INT,
            "set_hash": TEXT,
            "packed_at": TEXT,
            "sealed_at": TEXT,
            "last_sealed_at": TEXT,
            "relinquished_at": TEXT,
            "handed_to": TEXT,
            "waybill": TEXT,
            "opened_at": TEXT,
            "whole": INT,
            "seal_read": TEXT,
            "counted": INT,
            "received": INT,
            "missing": TEXT,
            "stated_at": TEXT,
            "stated_on": TEXT,
            "emptied_at": TEXT,
        },
        "cooler",
    ),
    "p_number": ({"laboratory_number": TEXT, "bottle": TEXT}, ("laboratory_number", "bottle")),
    "p_finding": (
        {
            "finding": TEXT,
            "kind": TEXT,
            "about": TEXT,
            "subject": TEXT,
            "round": TEXT,
            "site": TEXT,
            "says": TEXT,
            "evidence": TEXT,
            "opens_at": TEXT,
            "settled": TEXT,
        },
        ("finding", "subject"),
    ),
}

INDEXES: dict[str, tuple[tuple[str, ...], ...]] = {
    "p_fact": (("kind",), ("log", "seq"), ("replaces",)),
    "p_gone": (("by_hash",),),
    "p_visit": (("route",), ("round",), ("site",)),
    "p_bottle": (("round",), ("visit",), ("route",), ("cooler",)),
    "p_cooler": (("route",), ("round",)),
    "p_finding": (("round",), ("subject",)),
    "p_device": (("person",),),
    "p_protocol": (("protocol",),),
}


def make_tables(db: sqlite3.Connection) -> None:
    """Make the page tables that are not there yet, inside the caller's transaction."""
    from sqlite_utils import Database  # a tenth of a start, which makes no tables as a rule

    tables = Database(db)
    for name, (columns, key) in TABLES.items():
        tables[name].create(columns, pk=key, strict=True, if_not_exists=True)
        for index in INDEXES.get(name, ()):
            tables[name].create_index(list(index), if_not_exists=True)


def drop_tables(db: sqlite3.Connection) -> None:
    """Drop all page tables; the ledger makes them anew."""
    for name in TABLES:
        db.execute(f"DROP TABLE IF EXISTS {name}")


def put(db: sqlite3.Connection, table: str, row: dict[str, object]) -> None:
    """Write the one summary row of a subject, whole."""
    names = ", ".join(f'"{name}"' for name in row)
    marks = ", ".join("?" for _ in row)
    values = tuple(row.values())
    db.execute(f"INSERT OR REPLACE INTO {table} ({names}) VALUES ({marks})", values)
