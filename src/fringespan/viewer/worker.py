"""One thread that measures while the window stays free; always the newest outline, one at a time."""

from __future__ import annotations

import threading
from collections.abc import Callable

from qtpy.QtCore import QObject, Signal

from fringespan.viewer.state import Job, MeasuringState, Outcome, carry_out

__all__ = ["Measurer"]

_LINGER_S = 1.0
"""How long the thread waits for the next job before it ends: its warm memory is worth keeping during a drag."""


class Measurer(QObject):
    """Carries out the jobs of a state, one after the other.

    The next job is asked for only when the last is done, so that nothing older than the outline before the newest is
    ever started.

    Parameters
    ----------
    state : MeasuringState
    work : callable, optional
        What turns a job into an outcome, in the thread.
    """

    _delivered = Signal(object, object)

    def __init__(self, state: MeasuringState, work: Callable[[Job], Outcome] = carry_out) -> None:
        super().__init__()
        self._state = state
        self._work = work
        self._running = False
        self._closed = False
        self._condition = threading.Condition()
        self._job: Job | None = None
        self._thread: threading.Thread | None = None
        self._waits = False
        # a signal emitted in the thread is delivered in that of this object
        self._delivered.connect(self._take)
        state.work_wanted.connect(self._start_next)
        self._start_next()

    @property
    def is_idle(self) -> bool:
        """Whether nothing is being measured and nothing waits."""
        return not self._running

    def close(self) -> None:
        """Stop: no further job is begun, the result of a running one is dropped, the thread ends by itself."""
        self._closed = True
        self._state.work_wanted.disconnect(self._start_next)
        with self._condition:
            self._job = None
            self._condition.notify()

    def join(self, timeout_s: float) -> bool:
        """Wait until the thread has ended; say whether it has."""
        if self._thread is None:
            return True
        self._thread.join(timeout_s)
        return not self._thread.is_alive()

    def _start_next(self) -> None:
        if self._running or self._closed:
            return
        job = self._state.next_job()
        if job is None:
            return
        self._running = True
        with self._condition:
            self._job = job
            if not self._waits:
                self._waits = True
                self._thread = threading.Thread(target=self._run, name="fringespan measuring", daemon=True)
                self._thread.start()
            else:
                self._condition.notify()

    def _run(self) -> None:
        while True:
            with self._condition:
                if not self._condition.wait_for(lambda: self._job is not None or self._closed, _LINGER_S) or (
                    self._closed
                ):
                    self._waits = False
                    return
                job, self._job = self._job, None
            assert job is not None
            result: Outcome | BaseException
            try:
                result = self._work(job)
            except Exception as error:  # noqa: BLE001  # a bug is not swallowed: it is raised again in the window's thread
                result = error
            try:
                self._delivered.emit(job, result)
            except RuntimeError:
                # the window, and this object's Qt half with it, was closed meanwhile
                with self._condition:
                    self._waits = False
                return

    def _take(self, job: Job, result: Outcome | BaseException) -> None:
        self._running = False
        if self._closed:
            return
        if isinstance(result, BaseException):
            self._state.finish(job, Outcome(None, f"region {job.drawn.name!r}: an error in fringespan: {result}"))
            self._start_next()
            raise result
        self._state.finish(job, result)
        self._start_next()
