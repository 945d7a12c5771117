"""The peer of a node's start: a bare Flask application under the same server."""

import socket

from flask import Flask
from waitress.server import create_server

app = Flask(__name__)


@app.get("/")
def first() -> str:
    """Answer one line."""
    return "<!doctype html><title>Bare</title><p>Here."


if __name__ == "__main__":
    bound = socket.socket()
    bound.bind(("127.0.0.1", 0))
    bound.listen(64)
    server = create_server(app, sockets=[bound], threads=4)
    print(f"http://127.0.0.1:{bound.getsockname()[1]}/", flush=True)
    server.run()
