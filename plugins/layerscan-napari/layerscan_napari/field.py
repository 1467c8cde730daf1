"""The whole field: measured in the background, drawn over the image, read by a click, corrected by hand."""

from __future__ import annotations

from collections.abc import Generator
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QObject, Signal

from layerscan_napari import compute, edits, notes, overlays, traces
from layerscan_napari.budget import DragBudget
from layerscan_napari.desk import FieldResult
from layerscan_napari.helper import Helper
from layerscan_napari.worker import Task

if TYPE_CHECKING:
    from layerscan.records import Boundary

    from layerscan_napari.panel import LayerPanel


class FieldControl(QObject):
    """Answers the tab "Layers". ``shown`` tells that a field was measured and is shown."""

    shown = Signal(object)

    def __init__(self, panel: LayerPanel) -> None:
        super().__init__(panel)
        self.panel = panel
        self.results: dict[Any, compute.Result] = {}
        self.task: Task | None = None
        self.helper = Helper()
        self._image: Any = None
        tab = panel.layers
        tab.measure_asked.connect(self.start)
        tab.cancel_asked.connect(self.cancel)
        tab.boundary_chosen.connect(self._hold)
        tab.move_asked.connect(self._move)
        tab.delete_asked.connect(self._delete)
        tab.restore_asked.connect(self._restore)
        tab.add_asked.connect(self._add)
        panel.plots.boundary_moved.connect(self._on_handle)
        panel.plots.depth_picked.connect(self._on_picked)

    # --- measuring ----------------------------------------------------------------------------------------------------

    def start(self, corrections: tuple[str, ...] = ()) -> None:
        """Measure the field of the image at hand; a run under way is stopped."""
        panel = self.panel
        image, micrograph = panel.image, panel.micrograph()
        if image is None or micrograph is None:
            notes.tell("There is no image to measure. Drop a micrograph into the window.")
            return
        if micrograph.pixel_size is None:
            notes.tell("The pixel size of this image is unknown. Type it in the panel, such as 2.5 nm.")
            return
        self.cancel()
        settings = panel.measure_settings(edits=corrections)
        job = panel.make_job(settings, micrograph, **self._known(image, settings))
        helper = self.helper
        task = Task(lambda progress: _measure_field(job, helper, progress), on_cancel=helper.stop)
        task.progressed.connect(panel.layers.show_progress)
        task.succeeded.connect(self._on_success)
        task.failed.connect(self._on_failure)
        task.stopped.connect(self._on_stopped)
        self.task, self._image = task, image
        panel.layers.set_busy(True)
        panel.status.setText("Measuring the whole field…")
        task.start()

    def _known(self, image: Any, settings: Any) -> dict[str, Any]:
        """Earlier results of the same image that need no second measurement."""
        held = self.results.get(image.unique_id)
        if held is None:
            return {}
        known = {}
        plain = held.unedited or held.measurement
        if held.job.measure.model_copy(update={"edits": ()}) == settings.model_copy(update={"edits": ()}):
            known["unedited"] = plain
            if held.job.measure == settings:
                known["measured"] = held.measurement
        return known

    def cancel(self) -> None:
        """Stop the measurement that is running."""
        task, self.task = self.task, None
        if task is not None:
            task.cancel()
            self.panel.layers.set_busy(False)
            self.panel.status.setText("Stopped.")

    def stop(self) -> None:
        """Stop the measurement and end the helper's process: the panel is hidden."""
        self.cancel()
        self.helper.stop()

    def _on_success(self, outcome: tuple[compute.Result, traces.Segments]) -> None:
        if self.sender() is not self.task:
            return
        self.task = None
        result, segments = outcome
        self.panel.layers.set_busy(False)
        self.results[self._image.unique_id] = result
        if self._image is self.panel.image:
            self.show(result, segments)
            self.shown.emit(result)
        else:
            self.panel.status.setText(f"The field of '{self._image.name}' is measured; choose that image to see it.")

    def _on_failure(self, error: Exception) -> None:
        if self.sender() is self.task:
            self.task = None
            self.panel.layers.set_busy(False)
            self.panel.status.setText(str(error))
            notes.tell_error(error)

    def _on_stopped(self) -> None:
        if self.sender() is self.task:
            self.cancel()

    # --- showing ------------------------------------------------------------------------------------------------------

    def show(self, result: compute.Result, segments: traces.Segments | None = None) -> None:
        """Show a field's result: plots, numbers, traced boundaries and legend."""
        panel = self.panel
        assert result.measurement is not None
        panel.plots.forget_ranges()
        panel.show_result(result)
        segments = segments or traces.traced_segments(result.measurement)
        if len(segments.vectors) == 0:
            panel.layers.legend.set_limits(None)
            return
        active = panel.viewer.layers.selection.active
        overlays.show_traces(panel.viewer, panel.image, result.job.micrograph, segments)
        panel.viewer.layers.selection.active = active if active in panel.viewer.layers else panel.image
        panel.layers.legend.set_limits(overlays.thickness_limits(segments.thickness_nm))

    def show_held(self, image: Any) -> None:
        """Another image is at hand: its legend, or none."""
        held = None if image is None else self.results.get(image.unique_id)
        self.panel.layers.legend.set_limits(None)
        self.panel.layers.clicked_layer.setText("Click a layer in the image to read it here.")
        if held is None or held.measurement is None:
            return
        self.show(held)
        if held.prediction is None and held.job.predict is not None and held.measurement.layers and not held.notes:
            self.start(held.job.measure.edits)  # reopened from a file: the spectrum is calculated again

    def forget(self, image: Any) -> None:
        """The image's pixel size has changed: its field's result no longer holds."""
        self.results.pop(image.unique_id, None)
        earlier = overlays.find_overlay(self.panel.viewer, image, overlays.TRACES)
        if earlier is not None:
            self.panel.viewer.layers.remove(earlier)
        self.panel.layers.legend.set_limits(None)

    def results_to_save(self, image: Any) -> FieldResult | None:
        """The field's result of an image as saved work holds it."""
        held = self.results.get(image.unique_id)
        if held is None or held.measurement is None:
            return None
        return FieldResult(measurement=held.measurement, unedited=held.unedited)

    def take_saved(self, image: Any, saved: FieldResult) -> None:
        """Take over a field's result from saved work."""
        from layerscan.settings import MeasureSettings

        micrograph = self.panel.micrograph(image)
        if micrograph is not None:
            settings = MeasureSettings(**saved.measurement.settings)
            plain = settings.model_copy(update={"pixel_size": None, "page": 0})
            job = self.panel.make_job(plain, micrograph)
            self.results[image.unique_id] = compute.Result(
                job=job, measurement=saved.measurement, unedited=saved.unedited, final=True
            )

    # --- reading by a click -------------------------------------------------------------------------------------------

    def on_click(self, viewer: Any, event: Any) -> Generator[None, None, None]:
        """Read the layer under a click, wherever the click is not drawing or dragging something."""
        active = viewer.layers.selection.active
        drawing = active is not None and getattr(active, "mode", "pan_zoom") != "pan_zoom"
        start = event.position
        yield
        while event.type == "mouse_move":
            yield
        if drawing or self.panel.image is None:
            return
        if max(abs(a - b) for a, b in zip(start, event.position, strict=True)) > 1e-9:
            return
        layer = overlays.find_overlay(viewer, self.panel.image, overlays.TRACES)
        if layer is not None:
            row, column = layer.world_to_data(event.position)[-2:]
            self.read_layer(float(row), float(column))

    def read_layer(self, row_px: float, column_px: float) -> None:
        """Show thickness, roughness and uncertainty of the layer at a point of the image."""
        held = None if self.panel.image is None else self.results.get(self.panel.image.unique_id)
        if held is None or held.measurement is None:
            return
        found = traces.layer_at(held.measurement, row_px=row_px, column_px=column_px)
        if found is None:
            self.panel.layers.clicked_layer.setText("No traced layer there.")
            return
        self.panel.layers.clicked_layer.setText(traces.layer_in_words(held.measurement, found))
        if held.unedited is None:
            self.panel.layers.boundary.setValue(max(found.index - traces.layer_offset(held.measurement), 0))

    # --- correcting ---------------------------------------------------------------------------------------------------

    def _shown(self) -> tuple[tuple[Boundary, ...], tuple[str, ...]]:
        """Boundaries as found, and the corrections made so far, of the result that is shown."""
        shown = self.panel.shown
        if shown is None or shown.measurement is None:
            return (), ()
        return (shown.unedited or shown.measurement).boundaries, shown.job.measure.edits

    def _hold(self, index: int) -> None:
        boundaries, made = self._shown()
        if 0 <= index < len(boundaries):
            depth = boundaries[index].depth_nm + edits.shift_of(made, index=index)
            self.panel.plots.hold_boundary(depth - self._origin_nm())

    def _on_handle(self, depth_nm: float) -> None:
        boundaries, made = self._shown()
        index = self.panel.layers.boundary.value()
        if index < len(boundaries):
            shift = depth_nm + self._origin_nm() - boundaries[index].depth_nm
            self.panel.apply_edits(edits.move_boundary(made, index=index, shift_nm=shift))

    def _origin_nm(self) -> float:
        return 0.0 if self.panel.shown is None else self.panel.shown.origin_nm

    def _on_picked(self, depth_nm: float) -> None:
        self.panel.layers.depth.setValue(depth_nm + self._origin_nm())

    def _move(self, index: int, shift_nm: float) -> None:
        self.panel.apply_edits(edits.move_boundary(self._shown()[1], index=index, shift_nm=shift_nm))

    def _delete(self, index: int) -> None:
        self.panel.apply_edits(edits.delete_boundary(self._shown()[1], index=index))

    def _restore(self, index: int) -> None:
        self.panel.apply_edits(edits.drop_correction(self._shown()[1], index=index))

    def _add(self, depth_nm: float) -> None:
        self.panel.apply_edits(edits.add_boundary(self._shown()[1], depth_nm=depth_nm))


def _measure_field(job: compute.Job, helper: Helper, progress: Any) -> tuple[compute.Result, traces.Segments]:
    """Measure and prepare what is drawn: in the helper's process; here where only the light is calculated anew."""
    if job.measured is None:
        return helper.run(job, progress)
    result = compute.complete(job, DragBudget(), progress)
    return result, traces.traced_segments(job.measured)
