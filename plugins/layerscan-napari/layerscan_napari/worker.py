"""Work in the background: progress, cancel, and the result or the error back in the window's thread."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from typing import Any

from qtpy.QtCore import QCoreApplication, QObject, QThread, Signal

Work = Callable[[Callable[[str, "float | None"], None]], Any]
_TICK_S = 0.05


class _Running(QObject):
    """Keeps tasks until their threads have ended: a thread object must not go while its thread runs."""

    def __init__(self) -> None:
        super().__init__()
        self.tasks: set[Task] = set()

    def hold(self, task: Task) -> None:
        application = QCoreApplication.instance()
        if application is not None and self.thread() is not application.thread():
            self.moveToThread(application.thread())
        if not self.tasks and application is not None:
            application.aboutToQuit.connect(stop_all)
        self.tasks.add(task)
        task.finished.connect(self._release)

    def _release(self) -> None:
        self.tasks = {task for task in self.tasks if not task.isFinished()}


class Task(QThread):
    """Runs ``work(progress)`` once. Connect its signals to methods of objects that live in the window's thread."""

    progressed = Signal(str, object)
    succeeded = Signal(object)
    failed = Signal(object)
    stopped = Signal()

    def __init__(self, work: Work, *, on_cancel: Callable[[], None] | None = None) -> None:
        super().__init__()
        self._work: Work | None = work
        self._on_cancel = on_cancel
        self._cancelled = threading.Event()
        self._last = 0.0

    def start(self, priority: QThread.Priority = QThread.Priority.InheritPriority) -> None:
        """Start the work; the task stays alive until its thread has ended, whoever still refers to it."""
        _RUNNING.hold(self)
        super().start(priority)

    def cancel(self) -> None:
        """Ask the work to stop at its next report of progress, or as ``on_cancel`` stops it."""
        self._cancelled.set()
        if self._on_cancel is not None and self.isRunning():
            self._on_cancel()

    @property
    def cancelled(self) -> bool:
        """Whether the work was asked to stop."""
        return self._cancelled.is_set()

    def run(self) -> None:
        """Run the work in this thread; Qt calls it."""
        from layerscan.errors import Interrupted

        work, self._work = self._work, None
        assert work is not None
        try:
            result = work(self._report)
        except Interrupted:
            self.stopped.emit()
        except Exception as error:  # reported in the window, never lost with the thread
            if self.cancelled:
                self.stopped.emit()
            else:
                self.failed.emit(error.with_traceback(None))
        else:
            if self.cancelled:
                self.stopped.emit()
            else:
                self.succeeded.emit(result)

    def _report(self, what: str, fraction: float | None) -> None:
        from layerscan.errors import Interrupted

        if self._cancelled.is_set():
            raise Interrupted("Stopped on request.")
        now = time.monotonic()
        if now - self._last >= _TICK_S or fraction == 1.0:
            self._last = now
            self.progressed.emit(what, fraction)


def running() -> int:
    """Number of tasks whose threads have not ended."""
    return sum(not task.isFinished() for task in _RUNNING.tasks)


def stop_all(timeout_ms: int = 20_000) -> None:
    """Ask every task to stop and wait for it: the application is about to quit."""
    for task in tuple(_RUNNING.tasks):
        task.cancel()
    for task in tuple(_RUNNING.tasks):
        task.wait(timeout_ms)
    _RUNNING.tasks.clear()


_RUNNING = _Running()
