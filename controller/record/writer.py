"""How rows get from memory to the disk: in line in virtual time, from an own thread in real time.

Both keep rows in one list a table and write all lists in one transaction. The first error is final:
after a failed write or sync the pages in memory may no longer say what is on the medium, so that a
"successful" retry would lie. Nothing is written afterwards; the fault stays until the record ends.
"""

from __future__ import annotations

import asyncio
import sqlite3
import threading
from collections import deque
from collections.abc import Callable, Mapping
from typing import Protocol

from controller.errors import RecordAtRisk
from controller.record.schema import COUNTED

FLUSH_ROWS = 200  # virtual time: rows of one table before they are written; more would outgrow the cache
PERIOD_SECONDS = 0.1  # real time: group commit; the most that a power cut can take of unawaited rows
LAG_ROWS = 20  # real time: backlog at which the age of the oldest row is looked at
LAG_NS_MAX = 2_000_000_000  # older than this unwritten: a stuck disk, told to the supervisor
BACKLOG_ROWS_MAX = 100_000  # rows of one table kept for a stuck disk; beyond this they are lost
JOIN_SECONDS = 30.0  # longest wait at the end for the writer's thread

Row = tuple[object, ...]
WRITE_ERRORS = (sqlite3.Error, OSError, OverflowError)


class Committer:
    """Rows said and not yet committed, and the one transaction that commits them."""

    def __init__(self, connection: sqlite3.Connection, statements: Mapping[str, str]) -> None:
        self.connection = connection
        self.rows: dict[str, list[Row]] = {table: [] for table in statements}
        self.committed = dict.fromkeys(statements, 0)
        self._work = [(table, sql, self.rows[table]) for table, sql in statements.items()]

    def commit(self) -> None:
        """Write everything that the lists hold now. Raises one of WRITE_ERRORS.

        Safe beside a thread that appends: each step on a list is one indivisible operation, and
        rows leave the list only after the commit.
        """
        taken = [(table, sql, rows, rows[:]) for table, sql, rows in self._work if rows]
        if not taken:
            return
        execute = self.connection.execute
        execute("BEGIN IMMEDIATE")
        for _, sql, _, batch in taken:
            self.connection.executemany(sql, batch)
        execute("COMMIT")
        for table, _, rows, batch in taken:
            del rows[: len(batch)]
            self.committed[table] += len(batch)

    def finish(self) -> None:
        """Commit the rest and leave one file that stands alone, without a -wal beside it."""
        self.commit()
        self.rows["header"].append(("closed", "yes"))
        self.rows["header"].extend((f"rows.{table}", str(self.committed[table])) for table in COUNTED)
        self.commit()
        self.connection.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchall()
        try:
            # A file left in WAL mode cannot be opened on read-only media.
            self.connection.execute("PRAGMA journal_mode=DELETE").fetchall()
        except sqlite3.OperationalError as error:
            if "locked" not in str(error):  # a reader is looking; the checkpointed file is complete
                raise


class Writer(Protocol):
    """What the record asks of either mode. ``broken``: nothing more will be written."""

    fault: str | None
    broken: bool

    @property
    def full_rows(self) -> int:
        """Length of a list at which ``full`` must be called."""

    def full(self, at_ns: int | None) -> None:
        """A list has grown long; ``at_ns`` is the run's time, where known."""

    async def durable(self) -> None:
        """Return when everything said is committed. Raises RecordAtRisk."""

    def finish(self) -> None:
        """Commit, checkpoint, close the connection. Failures are left in ``fault``."""


class InlineWriter:
    """Virtual time: no thread may run, and the disk takes no simulated time."""

    full_rows = FLUSH_ROWS

    def __init__(self, committer: Committer, path: str) -> None:
        self.fault: str | None = None
        self.broken = False
        self._committer, self._path = committer, path

    def full(self, at_ns: int | None) -> None:
        if self.broken:
            return
        try:
            self._committer.commit()
        except WRITE_ERRORS as error:
            self._failed(error)

    async def durable(self) -> None:
        self.full(None)
        if self.fault is not None:
            raise RecordAtRisk(self.fault)

    def finish(self) -> None:
        try:
            if not self.broken:
                self._committer.finish()
        except WRITE_ERRORS as error:
            self._failed(error)
        finally:
            self._committer.connection.close()

    def _failed(self, error: Exception) -> None:
        self.broken = True
        self.fault = describe(self._path, error)


class ThreadWriter:
    """Real time: an own thread commits every 100 ms, at once when somebody waits."""

    full_rows = LAG_ROWS

    def __init__(self, committer: Committer, path: str) -> None:
        self.fault: str | None = None
        self.broken = False
        self._committer, self._path = committer, path
        self._waiters: deque[tuple[asyncio.AbstractEventLoop, asyncio.Future[None]]] = deque()
        self._wake = threading.Event()
        self._ending = False
        # A daemon, so that a disk that never answers cannot keep the process from ending.
        self._thread = threading.Thread(target=self._run, name="record writer", daemon=True)
        self._thread.start()

    def full(self, at_ns: int | None) -> None:
        """Overflow policy: rows are kept, the run is told to end; past the bound they are lost."""
        rows = self._committer.rows["telemetry"]
        try:
            oldest_ns = rows[0][1]
        except IndexError:
            return  # the thread has just written them
        assert isinstance(oldest_ns, int)
        if at_ns is not None and at_ns - oldest_ns > LAG_NS_MAX and self.fault is None:
            self.fault = (
                f"record {self._path}: rows {(at_ns - oldest_ns) / 1e9:.1f} s old are not on the disk yet "
                f"(limit {LAG_NS_MAX / 1e9:.0f} s). Next: look for what keeps the disk busy"
            )
        if len(rows) > BACKLOG_ROWS_MAX:
            self.broken = True

    async def durable(self) -> None:
        if self.fault is not None:
            raise RecordAtRisk(self.fault)
        loop = asyncio.get_running_loop()
        waiter = loop.create_future()
        self._waiters.append((loop, waiter))
        self._wake.set()
        await waiter

    def finish(self) -> None:
        self._ending = True
        self._wake.set()
        self._thread.join(JOIN_SECONDS)
        if self._thread.is_alive():
            self.broken = True
            self.fault = (
                f"record {self._path}: the disk did not answer for {JOIN_SECONDS:.0f} s at the end. "
                "Next: keep the file and its -wal together; check the disk"
            )

    def _run(self) -> None:
        while not self._ending:
            self._wake.wait(PERIOD_SECONDS)
            self._wake.clear()
            # Waiters first: whoever waits has said its rows before.
            waiters = [self._waiters.popleft() for _ in range(len(self._waiters))]
            self._attempt(self._committer.commit)
            for loop, waiter in waiters:
                try:
                    loop.call_soon_threadsafe(self._answer, waiter)
                except RuntimeError:
                    continue  # that loop has ended; nobody waits any more
        self._attempt(self._committer.finish)
        self._committer.connection.close()

    def _attempt(self, work: Callable[[], None]) -> None:
        if self.broken:
            return
        try:
            work()
        except WRITE_ERRORS as error:
            self.broken = True
            self.fault = describe(self._path, error)

    def _answer(self, waiter: asyncio.Future[None]) -> None:
        if waiter.done():
            return
        if self.broken:
            waiter.set_exception(RecordAtRisk(self.fault or f"record {self._path}: not written"))
        else:
            waiter.set_result(None)


def describe(path: str, error: Exception) -> str:
    """A write error as one line with the next action."""
    text = str(error) or type(error).__name__
    if "full" in text or getattr(error, "errno", None) == 28:
        advice = "make space on this disk; start a new record"
    else:
        advice = "check the disk; start a new record"
    return f"record {path}: {text}; rows since the last commit are lost, no more are written. Next: {advice}"
