"""A line that answers: what happens between the mouse and the plots.

While a vertex is dragged napari fires only ``set_data``; several of these in one turn of the event loop are one
refresh (a single-shot timer of 0 ms). On release ``data`` fires once: then everything is computed in the background,
with its uncertainty, and replaces what the drag has shown.
"""

from __future__ import annotations

import time
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QObject, QTimer, Signal

from layerscan_napari import compute
from layerscan_napari.budget import REST, DragBudget
from layerscan_napari.worker import Task

if TYPE_CHECKING:
    from collections.abc import Callable

Line = tuple[float, float, float, float]
REST_MS = 300
"""A line at rest for this long is computed in full, even while the mouse button is held."""


class LiveLine(QObject):
    """Follows the selected line of a shapes layer.

    ``make_job(line)`` gives the job for a line, or None where nothing can be measured yet.
    """

    refreshed = Signal(object)
    completed = Signal(object)
    failed = Signal(object)
    busy = Signal(bool)
    line_changed = Signal(object)
    released = Signal()

    def __init__(self, make_job: Callable[[Line], compute.Job | None], parent: QObject | None = None) -> None:
        super().__init__(parent)
        self.budget = DragBudget()
        self._make_job = make_job
        self._layer: Any = None
        self._line: Line | None = None
        self._task: Task | None = None
        self._waiting = False
        self._active = True
        self._timer = QTimer(self)
        self._timer.setSingleShot(True)
        self._timer.setInterval(0)
        self._timer.timeout.connect(self.refresh)
        self._rest = QTimer(self)
        self._rest.setSingleShot(True)
        self._rest.setInterval(REST_MS)
        self._rest.timeout.connect(self.commit)

    # --- which line ---------------------------------------------------------------------------------------------------

    def follow(self, layer: Any) -> None:
        """Follow the lines of another shapes layer, or of none."""
        if layer is self._layer:
            return
        if self._layer is not None:
            self._layer.events.set_data.disconnect(self._on_set_data)
            self._layer.events.data.disconnect(self._on_data)
            self._layer.selected_data.events.items_changed.disconnect(self._on_selected)
        self._layer = layer
        self._line = None
        if self._task is not None:  # it belongs to the layer before
            self._waiting = True
            self._task.cancel()
        if layer is not None:
            layer.events.set_data.connect(self._on_set_data)
            layer.events.data.connect(self._on_data)
            layer.selected_data.events.items_changed.connect(self._on_selected)

    @property
    def layer(self) -> Any:
        """The shapes layer that is followed, or None."""
        return self._layer

    @property
    def line(self) -> Line | None:
        """The line at hand."""
        return self._line

    def current(self) -> int | None:
        """Number of the shape that is followed: the selected line, else the last drawn."""
        if self._layer is None or self._layer.nshapes == 0:
            return None
        lines = [i for i, kind in enumerate(self._layer.shape_type) if kind == "line"]
        chosen = [i for i in self._layer.selected_data if i in lines]
        if chosen:
            return max(chosen)
        return lines[-1] if lines else None

    def _read_line(self) -> Line | None:
        number = self.current()
        if number is None:
            return None
        line = compute.rounded_line(self._layer.data[number])
        return line if line[:2] != line[2:] else None

    # --- while dragging -----------------------------------------------------------------------------------------------

    def _on_set_data(self, event: Any = None) -> None:
        if self._active and not self._timer.isActive():
            self._timer.start()

    def _on_selected(self, added: Any = None, removed: Any = None) -> None:
        """Another line was selected."""
        self._on_set_data()

    def refresh(self) -> compute.Result | None:
        """Compute and show what fits into a drag, if the line has changed."""
        start = time.thread_time()
        line = self._read_line()
        if line is None or line == self._line:
            return None
        self._line = line
        self.line_changed.emit(line)
        self._rest.start()
        job = self._make_job(line)
        if job is None:
            return None
        begun = time.thread_time()
        result = compute.refresh(job, self.budget)
        computed = time.thread_time() - begun
        self.refreshed.emit(result)
        self.budget.record(REST, 1e3 * (time.thread_time() - start - computed))
        return result

    # --- on release ---------------------------------------------------------------------------------------------------

    def _on_data(self, event: Any = None) -> None:
        action = getattr(event, "action", None)
        if self._active and str(getattr(action, "value", action)) in ("added", "changed", "removed"):
            self.released.emit()
            self.commit()

    def commit(self) -> None:
        """Compute everything for the line at hand in the background; a run under way is stopped first."""
        if self._timer.isActive():  # a movement that is not shown yet
            self._timer.stop()
            self.refresh()
        self._rest.stop()
        line = self._read_line()
        if line != self._line:
            self._line = line
            self.line_changed.emit(line)
        if self._task is not None:
            self._waiting = True
            self._task.cancel()
            return
        job = None if line is None else self._make_job(line)
        if job is None:
            self.busy.emit(False)
            return
        self._start(job)

    def warm_up(self, job: compute.Job) -> None:
        """Run a job in the background only to load and compile what a drag needs, and to learn what it costs."""
        if self._task is None:
            budget = self.budget
            task = Task(lambda progress: compute.complete(job, budget, progress))
            task.finished.connect(self._on_finished)
            self._task = task
            task.start()

    def _start(self, job: compute.Job) -> None:
        budget = self.budget
        task = Task(lambda progress: compute.complete(job, budget, progress))
        task.succeeded.connect(self._on_success)
        task.failed.connect(self._on_failure)
        task.finished.connect(self._on_finished)
        self._task = task
        self.busy.emit(True)
        task.start()

    def _on_success(self, result: compute.Result) -> None:
        if self._active and not self._waiting:
            self.completed.emit(result)

    def _on_failure(self, error: Exception) -> None:
        if self._active and not self._waiting:
            self.failed.emit(error)

    def _on_finished(self) -> None:
        self._task = None
        if self._waiting and self._active:
            self._waiting = False
            self.commit()
        else:
            self.busy.emit(False)

    # --- stopping -----------------------------------------------------------------------------------------------------

    def pause(self) -> None:
        """Stop the timer and the work: the panel is hidden."""
        self._active = False
        self._waiting = False
        self._timer.stop()
        self._rest.stop()
        if self._task is not None:
            self._task.cancel()

    def resume(self) -> None:
        """Go on: the panel is shown again."""
        self._active = True

    @property
    def running(self) -> bool:
        """Whether work is under way in the background."""
        return self._task is not None
