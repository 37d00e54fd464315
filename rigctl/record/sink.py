"""Where rows go: an interface, so that a disk's faults can be rehearsed."""

from __future__ import annotations

import threading
from collections.abc import Sequence
from typing import Protocol

from rigctl.errors import RigctlError
from rigctl.session.rows import Row, SweepRow

COMMIT_INTERVAL_S = 0.02
# A writer that falls this far behind makes the session wait, so that memory stays bounded.
_MOST_WAITING_BYTES = 8_000_000
_ROW_BYTES = 250


class RecordFailed(RigctlError):
    """The record cannot be written any more (disk full, removed, read-only)."""

    exit_code = 5


class RecordSink(Protocol):
    """What the runtime asks of a record."""

    def write(self, rows: Sequence[Row]) -> None:
        """Take rows, in order. A row with a known key replaces the earlier one."""
        ...

    def flush(self) -> None:
        """Return when everything written so far is durable."""
        ...

    def close(self, finished: bool) -> None:
        """Write what is left; when ``finished``, close the record for good."""
        ...


class MemorySink:
    """Keeps the rows: for replay and for tests."""

    def __init__(self) -> None:
        self.rows: list[Row] = []

    def write(self, rows: Sequence[Row]) -> None:
        """Keep ``rows``."""
        self.rows.extend(rows)

    def flush(self) -> None:
        """Nothing to do."""

    def close(self, finished: bool) -> None:
        """Nothing to do."""


class ThreadedSink:
    """Feeds another sink from a thread, in batches, a commit at most every 20 ms.

    The session's loop only appends to a list; an error of the writer is raised at the next call.
    """

    def __init__(self, inner: RecordSink, commit_interval_s: float = COMMIT_INTERVAL_S) -> None:
        self._inner = inner
        self._interval_s = commit_interval_s
        self._change = threading.Condition()
        self._waiting: list[Row] = []
        self._waiting_bytes = 0
        self._urgent = False
        self._writing = False
        self._stopping = False
        self._error: BaseException | None = None
        self._thread = threading.Thread(target=self._work, name="record-writer", daemon=True)
        self._thread.start()

    def write(self, rows: Sequence[Row]) -> None:
        """Queue ``rows``; waits only when the writer is far behind."""
        size = sum(len(row.samples) if isinstance(row, SweepRow) else _ROW_BYTES for row in rows)
        with self._change:
            while self._waiting_bytes > _MOST_WAITING_BYTES and self._error is None:
                self._urgent = True
                self._change.notify_all()
                self._change.wait()
            self._raise()
            self._waiting.extend(rows)
            self._waiting_bytes += size

    def flush(self) -> None:
        """Return when everything queued is durable."""
        with self._change:
            while (self._waiting or self._writing) and self._error is None:
                self._urgent = True
                self._change.notify_all()
                self._change.wait()
            self._raise()

    def close(self, finished: bool) -> None:
        """Write the rest, stop the thread, close the inner sink."""
        with self._change:
            self._stopping = True
            self._change.notify_all()
        self._thread.join()
        try:
            self._raise()
        finally:
            self._inner.close(finished and self._error is None)

    def _raise(self) -> None:
        if self._error is not None:
            raise self._error

    def _work(self) -> None:
        while True:
            with self._change:
                if not (self._urgent or self._stopping):
                    self._change.wait(self._interval_s)
                if self._stopping and not self._waiting:
                    return
                rows, self._waiting = self._waiting, []
                self._waiting_bytes = 0
                self._urgent = False
                self._writing = bool(rows)
            try:
                if rows:
                    self._inner.write(rows)
                    self._inner.flush()
            except BaseException as error:
                with self._change:
                    self._error = error
                    self._writing = False
                    self._change.notify_all()
                return
            with self._change:
                self._writing = False
                self._change.notify_all()
