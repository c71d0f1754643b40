"""Hands pieces of work to whoever computes them, and survives what happens to those.

In:  a crew (this process, worker processes, a cluster), a function, the pieces.
Out: an iterator of (piece, result), as they come; a piece that cannot be computed comes as `Failed`.

When processes die, nobody knows which piece was to blame: those at work are then tried one at a time. A piece that
takes its process down alone, or exceeds the time limit, is given up; the rest goes on.
"""

import time
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, CancelledError, Future, wait
from dataclasses import dataclass
from typing import Any, Protocol

from gutz.errors import ResourceError

Piece = tuple[int, ...]

GIVE_UP = 3
"""Pieces in a row that end their process before the run gives up: then it is not the pieces' fault."""
LOOK_EVERY = 1.0
"""Seconds between looks at the time limit and at the crew's health."""


class Executor(Protocol):
    """Anything that can be handed work; `concurrent.futures` pools and their like."""

    def submit(self, function: Callable[..., Any], /, *args: Any) -> Future[Any]:
        """Start the call and return its future."""
        ...


class Crew(Executor, Protocol):
    """An executor that can be started anew. in_flight: pieces handed over at once."""

    in_flight: int

    def renew(self) -> None:
        """Give up everything at work and start over."""
        ...

    def check(self) -> None:
        """Look whether anybody is still there, every second in which nothing is finished."""
        ...


class Here:
    """The crew that uses no other process: the call is made at once, in place."""

    in_flight = 1

    def submit(self, function: Callable[..., Any], /, *args: Any) -> Future[Any]:
        """Make the call and return its finished future."""
        future: Future[Any] = Future()
        try:
            future.set_result(function(*args))
        except Exception as error:
            future.set_exception(error)
        return future

    def renew(self) -> None:
        """Nothing can be lost here."""

    def check(self) -> None:
        """We are here."""


class Others:
    """Somebody else's executor: it cannot be started anew."""

    def __init__(self, executor: Executor, in_flight: int) -> None:
        self.in_flight = in_flight
        self.submit = executor.submit

    def renew(self) -> None:
        """Raise ResourceError."""
        raise ResourceError("the processes that computed have died; what is done is kept: continue with --resume")

    def check(self) -> None:
        """Theirs to look after."""


@dataclass(frozen=True)
class Failed:
    """In place of a result. reason: words that complete "this piece ..."."""

    reason: str


class LethalError(Exception):
    """Raised by a crew that knows by itself that a piece ended every process that tried it."""


def results(
    crew: Crew,
    function: Callable[[Piece], Any],
    pieces: Iterable[Piece],
    *,
    stopped: Callable[[], bool],
    limit: float,
) -> Iterator[tuple[Piece, Any]]:
    """Yield every piece with its result, or with `Failed`; order is that of completion.

    stopped: asked before a piece is handed over; once true, only what is at work is finished. limit: seconds a piece
    may take. Raises ResourceError when the processes keep dying, and whatever the function itself raises.
    """
    work = _Work(crew, function, iter(pieces), stopped, limit)
    while True:
        # With one piece at a time, the last one is handed out (and saved) before the next begins.
        if crew.in_flight == 1:
            yield from work.ready()
        work.hand_over()
        yield from work.ready()
        if not work.pending:
            return
        work.collect()


class _Work:
    """Who is at what: pieces waiting, at work, suspected of killing their process, done."""

    def __init__(
        self,
        crew: Crew,
        function: Callable[[Piece], Any],
        pieces: Iterator[Piece],
        stopped: Callable[[], bool],
        limit: float,
    ) -> None:
        self._crew, self._function, self._pieces = crew, function, pieces
        self._stopped, self._limit = stopped, limit
        self.pending: dict[Future[Any], tuple[Piece, float]] = {}
        self._again: deque[Piece] = deque()
        self._suspects: deque[Piece] = deque()
        self._done: deque[tuple[Piece, Any]] = deque()
        self._alone = False
        self._killed = 0

    def ready(self) -> Iterator[tuple[Piece, Any]]:
        """Hand out what is done. Raises ResourceError after that if processes keep dying."""
        while self._done:
            yield self._done.popleft()
        if self._killed >= GIVE_UP:
            raise ResourceError(
                f"{GIVE_UP} pieces in a row ended the process that computed them; memory may be short: "
                "continue with --resume and fewer --workers"
            )

    def hand_over(self) -> None:
        """Submit as many pieces as the crew takes; a suspect only by itself."""
        while not self._stopped() and len(self.pending) < self._crew.in_flight and not self._alone:
            if self._suspects:
                if self.pending:
                    return
                piece, self._alone = self._suspects.popleft(), True
            elif self._again:
                piece = self._again.popleft()
            elif (following := next(self._pieces, None)) is not None:
                piece = following
            else:
                return
            try:
                self.pending[self._crew.submit(self._function, piece)] = (piece, time.monotonic())
            except BrokenExecutor:
                # A process died between two pieces: this one has not even begun.
                self._alone = False
                self._again.appendleft(piece)
                self._lost()

    def collect(self) -> None:
        """Wait for something to happen and sort it."""
        finished = wait(self.pending, timeout=LOOK_EVERY, return_when=FIRST_COMPLETED).done
        broken = False
        for future in finished:
            piece = self.pending[future][0]
            try:
                result = future.result()
            except BrokenExecutor:
                broken = True
                continue
            except LethalError:
                self._give_up(piece, "ends every process that computes it")
            except (CancelledError, TimeoutError):
                raise ResourceError(
                    "the connection to the workers is lost; what is done is kept: continue with --resume"
                ) from None
            else:
                self._done.append((piece, result))
                self._killed = 0
            del self.pending[future]
            self._alone = False
        if broken:
            self._lost()
        elif not finished:
            self._crew.check()
            self._check_time()

    def _lost(self) -> None:
        """Processes have died, and with them everything at work."""
        pieces = [piece for piece, _ in self.pending.values()]
        self.pending.clear()
        self._crew.renew()
        if self._alone:
            self._give_up(pieces[0], "ends the process that computes it")
        else:
            self._suspects.extend(pieces)
        self._alone = False

    def _check_time(self) -> None:
        late = [f for f, (_, since) in self.pending.items() if time.monotonic() - since > self._limit]
        if not late:
            return
        for future in late:
            piece, _ = self.pending.pop(future)
            self._done.append((piece, Failed(f"took longer than {self._limit:g} s")))
        self._again.extend(piece for piece, _ in self.pending.values())
        self.pending.clear()
        self._alone = False
        self._crew.renew()

    def _give_up(self, piece: Piece, reason: str) -> None:
        self._killed += 1
        self._done.append((piece, Failed(reason)))
