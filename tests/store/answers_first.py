"""A planted fault: a node that answers before its COMMIT. Only ``test_kills.py`` starts it."""

import contextlib
import sqlite3
import threading
from collections.abc import Iterator

from fieldapp import cli, store

LATE_S = 0.03
"""So long after the answer the commit comes; a kill in between loses what was answered for."""


class AnswersFirst(store.Store):
    """Leaves the commit to another thread, and answers meanwhile."""

    _late: threading.Timer | None = None

    def _commit(self) -> None:
        self._late = threading.Timer(LATE_S, super()._commit)
        self._late.start()

    @contextlib.contextmanager
    def transaction(self) -> Iterator[sqlite3.Connection]:
        """Wait for the commit before, then hand out the next transaction."""
        with self._writing:
            if self._late is not None:
                self._late.join()
            with super().transaction() as db:
                yield db


if __name__ == "__main__":
    store.Store = AnswersFirst  # type: ignore[misc]
    cli.main()
