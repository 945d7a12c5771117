"""A TCP line between a tablet and central that can be cut and restored; it understands no byte."""

import asyncio
import contextlib
import threading
from collections.abc import Coroutine
from dataclasses import dataclass
from typing import Any, TypeVar

LOOPBACK = "127.0.0.1"
STEP_BYTES = 64 * 1024
WAIT_S = 10.0

T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class Line:
    """The state of the line: whether it is up, what goes over it, bytes that went so far."""

    up: bool
    open: int
    to_central: int
    to_tablet: int
    cuts: int


class Relay:
    """Listens on loopback and carries bytes to a port of this machine.

    Cut, it drops every running connection and each new one at once, and keeps its port: a tablet
    finds the same address when the line is back.
    """

    def __init__(self, central_port: int, *, port: int = 0) -> None:
        """Open the line.

        Args:
            central_port: Where central listens on this machine.
            port: Where to listen; 0 takes a free one.

        Raises:
            OSError: The port is taken.
        """
        self._central_port = central_port
        self._writers: set[asyncio.StreamWriter] = set()
        self._carrying: set[asyncio.Task[None]] = set()
        self._up, self._cuts = True, 0
        self._left: dict[str, int] = {}  # bytes by way, after which it is cut
        self._passed = {"to_central": 0, "to_tablet": 0}
        self._loop = asyncio.new_event_loop()
        self._thread = threading.Thread(target=self._loop.run_forever, daemon=True)
        self._thread.start()
        try:
            self._server = self._do(asyncio.start_server(self._meet, LOOPBACK, port))
        except OSError:
            self._stop()
            raise
        self.port: int = self._server.sockets[0].getsockname()[1]

    @property
    def url(self) -> str:
        """Return the address that a tablet takes for central's."""
        return f"http://{LOOPBACK}:{self.port}"

    def told(self) -> Line:
        """Return the state of the line now."""
        return Line(self._up, len(self._writers) // 2, **self._passed, cuts=self._cuts)

    def cut(self) -> None:
        """Cut the line; what runs over it breaks off."""
        self._do(self._cut())

    def cut_after(self, length: int, way: str = "to_central") -> None:
        """Cut the line by itself once so many more bytes went that way (``to_tablet``: back)."""
        self._left = {way: length}

    def restore(self) -> None:
        """Let connections through again."""
        self._left = {}
        self._up = True

    def close(self) -> None:
        """Close the line and its port for good."""
        self._do(self._end())
        self._stop()

    def __enter__(self) -> "Relay":
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    # on the loop's own thread from here on

    async def _meet(self, near: asyncio.StreamReader, back: asyncio.StreamWriter) -> None:
        carrying = asyncio.current_task()
        assert carrying is not None
        self._carrying.add(carrying)
        try:
            await self._carry(near, back)
        except OSError:
            pass  # either side let go: the other is let go below
        finally:
            self._carrying.discard(carrying)
            await self._drop(back)

    async def _carry(self, near: asyncio.StreamReader, back: asyncio.StreamWriter) -> None:
        if not self._up:
            return
        far, onward = await asyncio.open_connection(LOOPBACK, self._central_port)
        self._writers |= {back, onward}
        try:
            if self._up:  # it may have been cut while central answered
                await asyncio.gather(
                    self._pass(near, onward, "to_central"), self._pass(far, back, "to_tablet")
                )
        finally:
            self._writers -= {back, onward}
            await self._drop(onward)

    async def _pass(self, come: asyncio.StreamReader, go: asyncio.StreamWriter, way: str) -> None:
        while self._up and (data := await come.read(STEP_BYTES)):
            passes, last = self._measure(data, way)
            self._passed[way] += len(passes)
            go.write(passes)
            await go.drain()
            if last:
                await self._cut()
                return
        with contextlib.suppress(OSError):
            go.write_eof()

    def _measure(self, data: bytes, way: str) -> tuple[bytes, bool]:
        """Return how much of it still passes, and whether the line is cut behind it."""
        if way not in self._left:
            return data, False
        passes = data[: self._left[way]]
        self._left[way] -= len(passes)
        return passes, self._left[way] == 0

    async def _cut(self) -> None:
        if self._up:
            self._cuts += 1
        self._up, self._left = False, {}
        while self._writers:
            self._writers.pop().transport.abort()

    async def _end(self) -> None:
        await self._cut()
        self._server.close()
        if self._carrying:  # with their connections gone they end by themselves
            await asyncio.wait(tuple(self._carrying))

    @staticmethod
    async def _drop(writer: asyncio.StreamWriter) -> None:
        writer.close()
        with contextlib.suppress(OSError):
            await writer.wait_closed()

    # from any other thread

    def _do(self, what: Coroutine[Any, Any, T]) -> T:
        return asyncio.run_coroutine_threadsafe(what, self._loop).result(WAIT_S)

    def _stop(self) -> None:
        self._loop.call_soon_threadsafe(self._loop.stop)
        self._thread.join(WAIT_S)
        self._loop.close()
