"""The one thread that writes what the cycles give: in order, several works to a transaction, nothing lost.

::

    WRITING --the database is away, full or locked--> WAITING --it is back--> WRITING
       |                                                 |
       +--a work that can never succeed--> FAILED        +--close() runs out of patience--> CLOSED

While the database is away the same works are tried again, in order, with growing pauses; the queue fills, and
a submit waits for room. A work that cannot succeed fails its future and every one after it: later works build
on earlier ones, and a record with a hole is not a record. From then on each submit is refused with the
reason.
"""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Callable
from concurrent.futures import Future
from dataclasses import dataclass
from enum import Enum
from typing import Any, Concatenate, ParamSpec, TypeVar

from sqlalchemy import Connection

from softsensor.errors import RecordsError
from softsensor.records.engine import Database
from softsensor.records.errors import DatabaseAwayError

P = ParamSpec("P")
T = TypeVar("T")

FIRST_PAUSE = 0.2
LONGEST_PAUSE = 5.0
CLOSING_PATIENCE = 30.0
"""Seconds that leaving a ``with`` waits for a database that is away."""


class WriterState(Enum):
    """What the writer is doing."""

    WRITING = "writing"
    WAITING = "waiting for the database"
    FAILED = "failed"
    CLOSED = "closed"


@dataclass(frozen=True, slots=True)
class WriterReport:
    """The writer's state at one moment.

    :param why: why it waits or has failed, in one line; empty otherwise.
    :param queued: works that are not on record yet.
    """

    state: WriterState
    why: str
    queued: int
    written: int
    attempts: int


@dataclass(frozen=True, slots=True)
class _Work:
    run: Callable[[Connection], Any]
    future: Future[Any]


class RecordsWriter:
    """Writes to one database from one thread. Close it, or use it in a ``with``.

    :param capacity: how many works may wait; a submit beyond that waits for room.
    :param batch: how many works share a transaction at most.
    :param patience: seconds that a submit waits for room before it is refused; None: as long as it takes.
    """

    def __init__(
        self, database: Database, capacity: int = 10_000, batch: int = 200, patience: float | None = None
    ) -> None:
        self._database = database
        self._capacity = capacity
        self._batch = batch
        self._patience = patience
        self._queue: deque[_Work] = deque()
        self._changed = threading.Condition()
        self._state = WriterState.WRITING
        self._why = ""
        self._written = 0
        self._attempts = 0
        self._closing = False
        self._give_up = False
        self._thread = threading.Thread(target=self._loop, name="records writer", daemon=True)
        self._thread.start()

    @property
    def state(self) -> WriterState:
        """What the writer is doing."""
        return self._state

    def report(self) -> WriterReport:
        """The state, why, and how much is waiting."""
        with self._changed:
            return WriterReport(self._state, self._why, len(self._queue), self._written, self._attempts)

    def submit(
        self, work: Callable[Concatenate[Connection, P], T], *arguments: P.args, **named: P.kwargs
    ) -> Future[T]:
        """Have ``work(connection, *arguments)`` done in a transaction, after all submitted before it.

        The work may run more than once, so it changes nothing but the database, in a way that can be
        repeated. The future gives what the work returned once it is committed, or why it never will be.

        :raises RecordsError: the writer is closed or has failed; no room within the patience.
        """
        future: Future[T] = Future()
        future.set_running_or_notify_cancel()
        item = _Work(lambda connection: work(connection, *arguments, **named), future)
        with self._changed:
            room = self._changed.wait_for(self._may_enter, self._patience)
            if self._closing or self._state in (WriterState.FAILED, WriterState.CLOSED):
                raise RecordsError(self._refusal())
            if not room:
                raise RecordsError(f"{len(self._queue)} records wait for the database already: {self._why}")
            self._queue.append(item)
            self._changed.notify_all()
        return future

    def wait_for(self, state: WriterState, timeout: float | None = None) -> bool:
        """Wait until the writer is in a state; False when the time ran out."""
        with self._changed:
            return self._changed.wait_for(lambda: self._state is state, timeout)

    def flush(self, timeout: float | None = None) -> bool:
        """Wait until all that was submitted is on record; False when the time ran out.

        :raises RecordsError: the writer has failed.
        """
        with self._changed:
            done = self._changed.wait_for(
                lambda: not self._queue or self._state is WriterState.FAILED, timeout
            )
            if self._state is WriterState.FAILED:
                raise RecordsError(self._refusal())
            return done

    def close(self, timeout: float | None = None) -> None:
        """Write what waits, then end the thread.

        :param timeout: seconds without anything being written after which what waits is given up; None: never.
        :raises RecordsError: the writer has failed, or gave works up; says how many are not on record.
        """
        with self._changed:
            self._closing = True
            self._changed.notify_all()
            while not self._over() and not self._give_up:
                self._give_up = not self._progress(timeout)
            self._changed.notify_all()
        self._thread.join()
        with self._changed:
            lost = len(self._queue)
            self._fail_all(RecordsError(f"given up when the records were closed: {self._why}"))
            failed = self._state is WriterState.FAILED
            if not failed:
                self._state = WriterState.CLOSED
            self._changed.notify_all()
        if failed:
            raise RecordsError(self._refusal())
        if lost:
            raise RecordsError(f"{lost} records could not be written before closing: {self._why}")

    def __enter__(self) -> RecordsWriter:
        return self

    def __exit__(self, *exception: object) -> None:
        self.close(CLOSING_PATIENCE)

    def _may_enter(self) -> bool:
        over = self._closing or self._state in (WriterState.FAILED, WriterState.CLOSED)
        return over or len(self._queue) < self._capacity

    def _progress(self, timeout: float | None) -> bool:
        """Wait until something more is written, or nothing is left to; False when the time ran out."""
        before = self._written
        return self._changed.wait_for(lambda: self._over() or self._written > before, timeout)

    def _over(self) -> bool:
        return not self._queue or self._state is WriterState.FAILED

    def _refusal(self) -> str:
        if self._state is WriterState.FAILED:
            return f"nothing more is put on record since a write failed: {self._why}"
        return "the records are closed"

    def _loop(self) -> None:
        pause, limit = FIRST_PAUSE, self._batch
        while works := self._next(limit):
            done: list[Any] = []
            try:
                self._attempt(works, done)
            except DatabaseAwayError as error:
                self._wait(error, pause)
                pause = min(2.0 * pause, LONGEST_PAUSE)
            except Exception as error:
                if not done or len(works) == 1:
                    self._fail(error)
                    return
                limit = len(done) if len(done) < len(works) else 1
            else:
                self._succeed(works, done)
                pause, limit = FIRST_PAUSE, self._batch

    def _next(self, limit: int) -> list[_Work]:
        """The works of the next transaction, left in the queue until on record; none ends the thread."""
        with self._changed:
            self._changed.wait_for(lambda: self._queue or self._closing)
            if self._give_up:
                return []
            self._attempts += 1
            return [self._queue[i] for i in range(min(limit, len(self._queue)))]

    def _attempt(self, works: list[_Work], done: list[Any]) -> None:
        with self._database.write() as connection:
            for work in works:
                done.append(work.run(connection))

    def _wait(self, error: DatabaseAwayError, pause: float) -> None:
        with self._changed:
            self._state, self._why = WriterState.WAITING, str(error)
            self._changed.notify_all()
            self._changed.wait_for(lambda: self._give_up, pause)

    def _fail(self, error: Exception) -> None:
        with self._changed:
            self._state, self._why = WriterState.FAILED, str(error)
            first = self._queue.popleft()
            first.future.set_exception(error)
            self._fail_all(RecordsError(self._refusal()))
            self._changed.notify_all()

    def _fail_all(self, error: RecordsError) -> None:
        """Fail every future that waits; the lock is held."""
        while self._queue:
            self._queue.popleft().future.set_exception(error)

    def _succeed(self, works: list[_Work], done: list[Any]) -> None:
        for work, result in zip(works, done, strict=True):
            work.future.set_result(result)
        with self._changed:
            for _ in works:
                self._queue.popleft()
            self._written += len(works)
            self._state, self._why = WriterState.WRITING, ""
            self._changed.notify_all()
