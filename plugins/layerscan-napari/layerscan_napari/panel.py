"""The panel "Layers and colour": one dock widget over one image at a time."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QSignalBlocker, Qt, QTimer
from qtpy.QtWidgets import (
    QComboBox,
    QFormLayout,
    QHBoxLayout,
    QLabel,
    QLineEdit,
    QPlainTextEdit,
    QScrollArea,
    QSpinBox,
    QSplitter,
    QTabWidget,
    QVBoxLayout,
    QWidget,
)

from layerscan_napari import colours, compute, images, notes, overlays, tabs, worker
from layerscan_napari.field import FieldControl
from layerscan_napari.live import Line, LiveLine
from layerscan_napari.readout import Readout
from layerscan_napari.work import WorkControl

if TYPE_CHECKING:
    import napari
    from layerscan.records import Micrograph
    from layerscan.settings import CompareSettings, MeasureSettings, PredictSettings
    from qtpy.QtGui import QHideEvent, QShowEvent

DEFAULT_WIDTH = "20"
NO_PIXEL_SIZE = "The pixel size is unknown. Type it above; without it there are no lengths."


class LayerPanel(QWidget):
    """Draw a line across the layers and read period, thicknesses, spectrum and colour while it is dragged."""

    def __init__(self, napari_viewer: napari.Viewer, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        from layerscan_napari.plots import LivePlots

        self.viewer = napari_viewer
        self.shown: compute.Result | None = None
        self._images: list[Any] = []
        self._micrographs: dict[Any, tuple[Any, Micrograph | None]] = {}
        self._edits: tuple[str, ...] = ()
        self._connected = False
        self._materials: worker.Task | None = None
        self.live = LiveLine(self.line_job, self)
        self.plots = LivePlots(self._theme_colours())
        self.readout = Readout()
        self.specimen, self.light = tabs.SpecimenTab(), tabs.LightTab()
        self.layers, self.keeping = tabs.LayersTab(), tabs.KeptTab()
        self.field = FieldControl(self)
        self.work = WorkControl(self)
        self._build()
        self._wire()

    # --- building -----------------------------------------------------------------------------------------------------

    def _build(self) -> None:
        self.image_box = QComboBox()
        self.image_box.setAccessibleName("Image")
        self.image_box.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
        self.page_box = QSpinBox()
        self.page_box.setAccessibleName("Page of the file")
        self.page_box.setPrefix("page ")
        self.page_box.setKeyboardTracking(False)
        self.image_info = QLabel("Drop a micrograph into the window.")
        self.image_info.setAccessibleName("What is known of the image")
        self.image_info.setWordWrap(True)
        self.pixel_size = QLineEdit()
        self.pixel_size.setAccessibleName("Pixel size")
        self.pixel_size.setPlaceholderText("such as 2.5 +- 0.02 nm")
        self.pixel_size.setToolTip("Size of a pixel with its standard uncertainty; it goes before the file's own.")
        self.width_edit = QLineEdit(DEFAULT_WIDTH)
        self.width_edit.setAccessibleName("Width of the line")
        self.width_edit.setToolTip("Width of the band that is averaged: pixels (20) or a length (300 nm)")
        self.width_edit.setMaximumWidth(80)
        self.line_edit = QLineEdit()
        self.line_edit.setAccessibleName("Line")
        self.line_edit.setPlaceholderText("R0,C0,R1,C1")
        self.line_edit.setToolTip("Both ends of the line, row and column in pixels; type them instead of drawing")
        self.draw_button = tabs.button("&Draw a line", "Draw a line across the layers with the mouse", self.draw_line)
        self.keep_button = tabs.button("&Keep", "Keep this result in the table", self.work.keep)
        self.copy_button = tabs.button("&Copy command", "Copy the call that repeats this", self.work.copy_shown)
        self.status = QLabel()
        self.status.setAccessibleName("State")
        self.status.setWordWrap(True)
        self.doubts = QPlainTextEdit()
        self.doubts.setReadOnly(True)
        self.doubts.setAccessibleName("Answer, doubts and conditions of this result")

        form = QFormLayout()
        form.setVerticalSpacing(3)
        for title, widgets in (
            ("&Image", (self.image_box, self.page_box)),
            ("", (self.image_info,)),
            ("Pixel si&ze", (self.pixel_size,)),
            ("Li&ne", (self.line_edit, QLabel("width"), self.width_edit)),
        ):
            row = QHBoxLayout()
            for widget in widgets:
                row.addWidget(widget, int(widget in (self.image_box, self.line_edit, self.pixel_size)))
            label = QLabel(title)
            label.setBuddy(widgets[0])
            form.addRow(label, row)
        buttons = QHBoxLayout()
        for made in (self.draw_button, self.keep_button, self.copy_button):
            buttons.addWidget(made)

        self.tabs = QTabWidget()
        self.tabs.setAccessibleName("Settings and results")
        for title, widget in (
            ("Specimen", self.specimen), ("Light", self.light), ("Layers", self.layers), ("Kept", self.keeping),
        ):  # fmt: skip
            area = QScrollArea()
            area.setWidget(widget)
            area.setWidgetResizable(True)
            area.setFrameShape(QScrollArea.Shape.NoFrame)
            self.tabs.addTab(area, title)
        self.tabs.addTab(self.doubts, "Doubts")
        self.tabs.setMinimumHeight(170)
        splitter = QSplitter(Qt.Orientation.Vertical)
        splitter.addWidget(self.plots)
        splitter.addWidget(self.tabs)
        splitter.setChildrenCollapsible(False)
        splitter.setStretchFactor(0, 1)
        splitter.setStretchFactor(1, 1)
        splitter.setSizes([330, 260])
        layout = QVBoxLayout(self)
        layout.setContentsMargins(4, 4, 4, 4)
        layout.setSpacing(4)
        layout.addLayout(form)
        layout.addLayout(buttons)
        layout.addWidget(self.readout)
        layout.addWidget(self.status)
        layout.addWidget(splitter, 1)
        self.setMinimumWidth(400)

    def _wire(self) -> None:
        self._pick_timer = QTimer(self)
        self._pick_timer.setSingleShot(True)
        self._pick_timer.setInterval(0)
        self._pick_timer.timeout.connect(self._start_picking)
        self.image_box.activated.connect(self._on_image_chosen)
        self.page_box.valueChanged.connect(self._on_page_chosen)
        self.pixel_size.editingFinished.connect(self._on_pixel_size)
        self.width_edit.editingFinished.connect(self._on_width)
        self.line_edit.editingFinished.connect(self._on_line_typed)
        self.live.refreshed.connect(self.show_result)
        self.live.completed.connect(self.show_result)
        self.live.failed.connect(self._on_failure)
        self.live.busy.connect(self._on_busy)
        self.live.line_changed.connect(self._on_line_changed)
        self.live.released.connect(self._pick_timer.start)
        for tab in (self.specimen, self.light):
            tab.changed.connect(self.recompute)

    # --- settings -----------------------------------------------------------------------------------------------------

    def measure_settings(self, line: Line | None = None, edits: tuple[str, ...] = ()) -> MeasureSettings:
        """Corrections of the section with a line and its width, or for the whole field."""
        chosen = self.specimen.corrections.settings()
        if line is None:
            return chosen.model_copy(update={"edits": edits})
        return chosen.model_copy(update={"line": line, "width": self.width(), "edits": edits})

    def predict_settings(self) -> PredictSettings:
        """Materials and light, as they stand in both tabs."""
        light = self.light.conditions.settings()
        return self.specimen.stack.settings().model_copy(update={n: getattr(light, n) for n in tabs.LIGHT})

    def compare_settings(self) -> CompareSettings:
        """How prediction and observation are compared."""
        return self.light.comparison.settings()

    def show_settings(self, measure: MeasureSettings, predict: PredictSettings, compare: CompareSettings) -> None:
        """Put settings into the tabs."""
        self.specimen.corrections.show_settings(measure.model_copy(update={"line": None, "width": None, "edits": ()}))
        self.specimen.stack.show_settings(predict)
        self.light.conditions.show_settings(predict)
        self.light.comparison.show_settings(compare)

    def width(self) -> str:
        """Width of the line as the user states it."""
        return self.width_edit.text().strip() or DEFAULT_WIDTH

    def make_job(self, measure: MeasureSettings, micrograph: Micrograph, **more: Any) -> compute.Job:
        """A job with the settings of both tabs; without materials nothing is predicted."""
        predict = self.predict_settings()
        return compute.Job(
            micrograph=micrograph,
            measure=measure,
            predict=predict if predict.dark or predict.bright or predict.middle else None,
            compare=self.compare_settings(),
            observed=self.work.observed,
            **more,
        )

    def line_job(self, line: Line) -> compute.Job | None:
        """The job for a line on the image at hand; None without an image or its pixel size."""
        micrograph = self.micrograph()
        if micrograph is None:
            return None
        if micrograph.pixel_size is None:
            self.status.setText(NO_PIXEL_SIZE)
            return None
        return self.make_job(self.measure_settings(line, self._edits), micrograph)

    # --- the image ----------------------------------------------------------------------------------------------------

    @property
    def image(self) -> Any:
        """The image layer at hand, or None."""
        place = self.image_box.currentIndex()
        return self._images[place] if 0 <= place < len(self._images) else None

    def image_layers(self) -> list[Any]:
        """Image layers that can be measured, in the order of the layer list."""
        return list(self._images)

    def micrograph(self, image: Any = None) -> Micrograph | None:
        """The micrograph behind an image layer (the one at hand where none is given)."""
        image = self.image if image is None else image
        if image is None:
            return None
        state = (id(image.data), image.metadata.get(images.KEY), tuple(image.scale), tuple(image.units))
        held = self._micrographs.get(image.unique_id)
        if held is None or held[0] != state:
            held = (state, images.micrograph_of_layer(image))
            self._micrographs[image.unique_id] = held
        return held[1]

    def choose_image(self, image: Any) -> None:
        """Take another image layer in hand."""
        self.image_box.setCurrentIndex(self._images.index(image))
        self._on_image_chosen()

    def _list_images(self, event: Any = None) -> None:
        from napari.layers import Image

        held = self.image
        found = [layer for layer in self.viewer.layers if isinstance(layer, Image) and images.can_measure(layer)]
        with QSignalBlocker(self.image_box):
            self._images = found
            self.image_box.clear()
            for layer in found:
                self.image_box.addItem(layer.name)
            self.image_box.setCurrentIndex(found.index(held) if held in found else len(found) - 1)
        gone = set(self._micrographs) - {layer.unique_id for layer in found}
        for key in gone:
            del self._micrographs[key]
        if self.live.layer is not None and self.live.layer not in self.viewer.layers:
            self.live.follow(None)
        if self.image is not held:
            self._on_image_chosen()

    def _on_image_chosen(self, index: int = 0) -> None:
        image, micrograph = self.image, self.micrograph()
        self._edits = ()
        self.plots.forget_ranges()
        self.readout.clear()
        self.plots.show_measurement(None)
        self.plots.show_prediction(None)
        self.shown = None
        self._describe_image()
        self.live.budget.forget(compute.MEASURE)
        lines = None if image is None else overlays.find_overlay(self.viewer, image, overlays.LINES)
        self.live.follow(lines)
        if lines is not None and micrograph is not None:
            self.live.commit()
        self.field.show_held(image)

    def _describe_image(self) -> None:
        micrograph = self.micrograph()
        with QSignalBlocker(self.page_box):
            self.page_box.setVisible(micrograph is not None and micrograph.page_count > 1)
            if micrograph is not None:
                self.page_box.setRange(0, micrograph.page_count - 1)
                self.page_box.setValue(micrograph.page)
        self.draw_button.setEnabled(micrograph is not None)
        self.layers.measure.setEnabled(micrograph is not None)
        if micrograph is None:
            self.image_info.setText("Drop a micrograph into the window.")
            self.pixel_size.clear()
            return
        self.image_info.setText(notes.image_in_words(micrograph))
        self.image_info.setToolTip("\n".join(notes.image_doubts(micrograph)))
        size = micrograph.pixel_size
        self.pixel_size.setText((size.stated or "") if size is not None else "")
        self.pixel_size.setPlaceholderText(
            "unknown: type it, such as 2.5 +- 0.02 nm" if size is None else "from the file"
        )
        if size is None:
            self.status.setText(NO_PIXEL_SIZE)

    def _on_pixel_size(self) -> None:
        """Take the user's pixel size for the image at hand: its layers are placed anew, everything is measured anew."""
        image, micrograph = self.image, self.micrograph()
        text = self.pixel_size.text().strip()
        if image is None or micrograph is None:
            return
        if text == ((micrograph.pixel_size.stated or "") if micrograph.pixel_size else ""):
            return
        try:
            fresh = images.with_pixel_size(micrograph, text or None)
        except Exception as error:
            notes.tell_error(error)
            self._describe_image()
            return
        overlays.place_anew(self.viewer, image, fresh)
        self.viewer.reset_view()
        self._describe_image()
        self.plots.forget_ranges()
        self.status.setText("")
        self.field.forget(image)
        self.live.commit()

    def _on_page_chosen(self, page: int) -> None:
        micrograph = self.micrograph()
        if micrograph is not None and micrograph.path is not None and page != micrograph.page:
            self.work.open_page(micrograph, page)

    # --- the line -----------------------------------------------------------------------------------------------------

    def draw_line(self) -> None:
        """Let the mouse draw a line on the image at hand."""
        lines = self.lines_layer()
        if lines is None:
            return
        lines.mode = "add_line"
        self._warm_up()
        self.status.setText("Press, drag across the layers, let go. Then drag either end.")

    def set_line(self, line: Line) -> None:
        """Put the line somewhere: the line at hand moves, or a first one is added."""
        lines = self.lines_layer()
        if lines is None:
            return
        ends = [[line[0], line[1]], [line[2], line[3]]]
        number = self.live.current()
        if number is None:
            lines.add_lines([ends], edge_width=self._width_px())
            lines.selected_data = {lines.nshapes - 1}
        else:
            data = list(lines.data)
            data[number] = ends
            lines.data = data
            lines.selected_data = {number}
        self.live.commit()

    def add_line(self, line: Line) -> None:
        """Add another line on the image at hand and take it in hand."""
        lines = self.lines_layer()
        if lines is not None:
            lines.add_lines([[[line[0], line[1]], [line[2], line[3]]]], edge_width=self._width_px())
            lines.selected_data = {lines.nshapes - 1}
            self.live.commit()

    def lines_layer(self) -> Any:
        """The layer with the lines of the image at hand, made where missing and made active; None without an image."""
        image, micrograph = self.image, self.micrograph()
        if image is None or micrograph is None:
            return None
        lines = overlays.lines_layer(self.viewer, image, micrograph, width_px=self._width_px())
        overlays.marks_layer(self.viewer, image, micrograph)
        self.viewer.layers.selection.active = lines
        self.live.follow(lines)
        return lines

    def _width_px(self) -> float:
        from layerscan.settings import parse_width

        value, unit = parse_width(self.width())
        micrograph = self.micrograph()
        size = None if micrograph is None else micrograph.pixel_size
        if unit == "px" or size is None:
            return value
        return value / (size.row_nm * size.column_nm) ** 0.5

    def _on_width(self) -> None:
        from layerscan.settings import parse_width

        try:
            parse_width(self.width())
        except ValueError as error:
            notes.tell_error(error)
            self.width_edit.setText(DEFAULT_WIDTH)
        lines = None if self.image is None else overlays.find_overlay(self.viewer, self.image, overlays.LINES)
        if lines is not None and any(abs(width - self._width_px()) > 1e-9 for width in lines.edge_width):
            lines.edge_width = self._width_px()
            self.live.budget.forget(compute.MEASURE)
            self.live.commit()

    def _on_line_typed(self) -> None:
        text = self.line_edit.text().strip()
        if not text or text == notes.line_in_words(self.live.line):
            return
        try:
            row0, column0, row1, column1 = (float(part) for part in text.split(","))
        except ValueError:
            notes.tell(f"'{text}' is no line. Give four numbers R0,C0,R1,C1: row and column of both ends.")
            return
        self.set_line((row0, column0, row1, column1))

    def _on_line_changed(self, line: Line | None) -> None:
        self._edits = ()
        self.plots.hold_boundary(None)
        self.line_edit.setText(notes.line_in_words(line))

    def _start_picking(self) -> None:
        """After a line was drawn, let its ends be dragged."""
        layer = self.live.layer
        if layer is not None and layer.mode == "add_line":
            layer.mode = "direct"

    def _warm_up(self) -> None:
        """Load and compile what a drag needs, on a line through the middle, before the first drag."""
        micrograph = self.micrograph()
        if micrograph is None or self.live.budget.cost_ms(compute.MEASURE) is not None:
            return
        rows, columns = micrograph.shape
        job = self.line_job((rows / 2, 0.25 * columns, rows / 2, 0.75 * columns))
        if job is not None:
            self.live.warm_up(job)

    # --- results ------------------------------------------------------------------------------------------------------

    def recompute(self) -> None:
        """Settings have changed: compute what is shown anew."""
        if self.shown is not None and self.shown.job.measure.line is None:
            self.field.start(self.shown.job.measure.edits)
        else:
            self.live.commit()

    def apply_edits(self, edits: tuple[str, ...]) -> None:
        """Correct boundaries of the result that is shown; the result without corrections is kept beside it."""
        if self.shown is None or self.shown.measurement is None:
            notes.tell("There is no result to correct yet. Draw a line or measure the field first.")
        elif self.shown.job.measure.line is None:
            self.field.start(edits)
        else:
            self._edits = edits
            self.live.commit()

    def show_result(self, result: compute.Result) -> None:
        """Show a result: while dragging, what fits; on release or from the field, all of it."""
        if compute.MEASURE not in result.following:
            before = () if result.unedited is None else result.unedited.boundaries
            self.plots.show_measurement(result.measurement, [b.depth_nm - result.origin_nm for b in before])
            self._mark(result)
        elif result.profile is not None:
            self.plots.show_profile(*result.profile)
            self._mark(result)
        if compute.PREDICT not in result.following:
            self.plots.show_prediction(result.prediction)
        self.plots.set_following(result.following)
        self.readout.show_result(result)
        if result.final:
            self.shown = result
            self._show_doubts(result)
            found = result.unedited or result.measurement
            self.layers.set_boundaries(0 if found is None else len(found.boundaries))
            self.layers.edit_state.setText(notes.edits_in_words(result))
            self.status.setText(" ".join(result.notes) or notes.up_to_date(result))
        elif result.notes:
            self.status.setText(" ".join(result.notes))

    def _mark(self, result: compute.Result) -> None:
        image = self.image
        marks = None if image is None else overlays.find_overlay(self.viewer, image, overlays.MARKS)
        if marks is not None:
            line = result.job.measure.line
            overlays.show_marks(marks, None if line is None else result.measurement, width_px=self._width_px())

    def _show_doubts(self, result: compute.Result) -> None:
        lines = notes.doubts_of(result)
        answer = "" if result.comparison is None else f"{result.comparison.sentence}\n\n"
        self.doubts.setPlainText(answer + ("\n".join(f"• {line}" for line in lines) or "No doubts."))
        self.tabs.setTabText(self.tabs.indexOf(self.doubts), f"Doubts ({len(lines)})" if lines else "Doubts")

    def _on_failure(self, error: Exception) -> None:
        self.readout.clear()
        self.plots.show_prediction(None)
        self.status.setText(str(error))
        notes.tell_error(error)

    def _on_busy(self, busy: bool) -> None:
        if busy:
            self.status.setText("Updating…")
        elif self.status.text() == "Updating…":
            self.status.setText("")

    # --- the window ---------------------------------------------------------------------------------------------------

    def _theme_colours(self) -> colours.PlotColours:
        from napari.utils.theme import get_theme

        return colours.colours_for(get_theme(self.viewer.theme).background.as_rgb_tuple()[:3])

    def _on_theme(self, event: Any = None) -> None:
        self.plots.set_colours(self._theme_colours())

    def _layer_signals(self) -> tuple[Any, ...]:
        events = self.viewer.layers.events
        return events.inserted, events.removed, events.renamed

    def showEvent(self, event: QShowEvent) -> None:
        """Begin to follow the viewer."""
        super().showEvent(event)
        if self._connected:
            return
        self._connected = True
        for signal in self._layer_signals():
            signal.connect(self._list_images)
        self.viewer.events.theme.connect(self._on_theme)
        self.viewer.mouse_drag_callbacks.append(self.field.on_click)
        self.live.resume()
        self._on_theme()
        self._list_images()
        self._offer_materials()

    def hideEvent(self, event: QHideEvent) -> None:
        """Stop timers and work; closing or removing a dock hides it and never sends a close event."""
        super().hideEvent(event)
        if event.spontaneous() or not self._connected:  # a minimised window goes on working
            return
        self._connected = False
        for signal in self._layer_signals():
            signal.disconnect(self._list_images)
        self.viewer.events.theme.disconnect(self._on_theme)
        if self.field.on_click in self.viewer.mouse_drag_callbacks:
            self.viewer.mouse_drag_callbacks.remove(self.field.on_click)
        self._pick_timer.stop()
        self.live.pause()
        self.field.stop()

    def _offer_materials(self) -> None:
        """Offer the catalogue's names while a material is typed; the catalogue is read in the background."""
        if self._materials is not None:
            return
        self._materials = worker.Task(lambda progress: notes.material_names())
        self._materials.succeeded.connect(self._on_materials)
        self._materials.start()

    def _on_materials(self, names: list[str]) -> None:
        for field in ("dark", "bright", "middle", "incident", "substrate"):
            self.specimen.stack.offer(field, names)
