"""The peers of a node: a bare Flask application under the same server, which may keep its posts.

Without a word after its name it answers one line; with the path of a database it also takes posts,
each kept by one INSERT and one COMMIT under the settings of the record.
"""

import json
import socket
import sqlite3
import sys
import threading
from datetime import UTC, datetime
from pathlib import Path

from flask import Flask, redirect, request
from waitress.server import create_server
from werkzeug.wrappers import Response

app = Flask(__name__)


@app.get("/")
def first() -> str:
    """Answer one line."""
    return "<!doctype html><title>Bare</title><p>Here."


def open_database(path: Path) -> sqlite3.Connection:
    """Return a database under the settings of the record, with one table and no rule."""
    db = sqlite3.connect(path, isolation_level=None, check_same_thread=False)
    db.execute("PRAGMA journal_mode = WAL")
    db.execute("PRAGMA synchronous = FULL")
    db.execute("CREATE TABLE IF NOT EXISTS post (id INTEGER PRIMARY KEY, at TEXT, fields TEXT)")
    return db


def commit(db: sqlite3.Connection, fields: dict[str, str]) -> None:
    """Keep the fields of one post durably."""
    db.execute("BEGIN IMMEDIATE")
    at = datetime.now(UTC).isoformat()
    db.execute("INSERT INTO post (at, fields) VALUES (?, ?)", (at, json.dumps(fields)))
    db.execute("COMMIT")


def take_posts(path: Path) -> None:
    """Let the application keep what is posted to it."""
    db, lock = open_database(path), threading.Lock()

    @app.post("/post")
    def keep() -> Response:
        with lock:
            commit(db, request.form.to_dict())
        return redirect("/", 303)


if __name__ == "__main__":
    if len(sys.argv) > 1:
        take_posts(Path(sys.argv[1]))
    bound = socket.socket()
    bound.bind(("127.0.0.1", 0))
    bound.listen(64)
    server = create_server(app, sockets=[bound], threads=4)
    print(f"http://127.0.0.1:{bound.getsockname()[1]}/", flush=True)
    server.run()
