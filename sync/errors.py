"""The tree of what can go wrong while facts are kept and replicated.

SyncError
├── Unwritable      a fact that may not be signed as it stands
├── BadEntry        bytes that are not the signed entry they pass for
├── Gap             an entry whose forerunner is missing
├── Fork            two different entries for one place in a log
├── NotKept         the database gave back other bytes than it was given
├── KeyUnreadable   a key file that is missing, damaged or already there
├── FolderHeld      another running program owns the data folder
├── Unsuitable      a folder, database or address that must not be used
├── NoContact       nothing that can be trusted came back from the other side
└── Refused         the other side understood and said no

Every message is a sentence and says what to do next.
"""


class SyncError(Exception):
    """Something stands in the way of keeping or replicating facts; nothing was lost."""


class Unwritable(SyncError):
    """A fact was not written because it cannot be signed in one certain form."""


class BadEntry(SyncError):
    """An entry does not hold what its signature promises; ``why`` says what differs."""

    def __init__(self, why: str) -> None:
        self.why = why
        super().__init__(f"This entry does not hold: {why}. Ask its author to send it again.")


class Gap(SyncError):
    """An entry came before its forerunner; send the log from ``wanted`` on."""

    def __init__(self, log: str, wanted: int, got: int) -> None:
        self.log, self.wanted, self.got = log, wanted, got
        super().__init__(
            f"Entry {got} of log {log} came, but {wanted} is next. Send the log from {wanted} on."
        )


class Fork(SyncError):
    """Two histories claim one place in a log; keep both and open a new log."""

    def __init__(self, log: str, seq: int) -> None:
        self.log, self.seq = log, seq
        super().__init__(
            f"Log {log} has two histories at entry {seq}. Keep both and go on in a new log."
        )


class NotKept(SyncError):
    """A row read back differs from the row written; undo the transaction and stop."""

    def __init__(self, log: str, seq: int) -> None:
        self.log, self.seq = log, seq
        super().__init__(
            f"The disk gave back other bytes for entry {seq} of log {log}. "
            "Nothing of this act was saved: restart, then run verify."
        )


class KeyUnreadable(SyncError):
    """A device key could not be read or written; the sentence says which file and why."""


class FolderHeld(SyncError):
    """Another running program owns this data folder; stop it or use another folder."""

    def __init__(self, path: object) -> None:
        self.path = path
        super().__init__(
            f"Another running program uses the folder {path}. "
            "Stop it, or name another folder, and start again."
        )


class Unsuitable(SyncError):
    """A folder, database or address cannot be trusted with the record."""


class NoContact(SyncError):
    """No answer came that is surely from central; everything waits and is sent later.

    ``retry_after`` is what the other side asked for, in seconds, if it asked.
    """

    def __init__(self, says: str, retry_after: int | None = None) -> None:
        self.retry_after = retry_after
        super().__init__(f"No contact with central: {says}. What waits is kept and sent later.")


class Refused(SyncError):
    """The other side said no; ``kind`` is its stable name and ``says`` its sentence."""

    def __init__(self, kind: str, says: str, retry_after: int | None = None) -> None:
        self.kind, self.says, self.retry_after = kind, says, retry_after
        super().__init__(says)
