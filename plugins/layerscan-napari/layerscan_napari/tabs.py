"""The panel's tabs: specimen and light (settings), layers (whole field and corrections), kept results.

They hold widgets and say what was asked for by signals; the panel answers.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from layerscan.settings import CompareSettings, MeasureSettings, PredictSettings
from qtpy.QtCore import Qt, Signal
from qtpy.QtGui import QColor, QLinearGradient, QPainter
from qtpy.QtWidgets import (
    QDoubleSpinBox,
    QGridLayout,
    QGroupBox,
    QHBoxLayout,
    QHeaderView,
    QLabel,
    QProgressBar,
    QPushButton,
    QSpinBox,
    QTableWidget,
    QTableWidgetItem,
    QVBoxLayout,
    QWidget,
)

from layerscan_napari import colours
from layerscan_napari.forms import SettingsForm
from layerscan_napari.traces import value_with_u

if TYPE_CHECKING:
    from collections.abc import Sequence

    from qtpy.QtGui import QPaintEvent

    from layerscan_napari.desk import Kept

SPECIMEN = ("dark", "bright", "middle", "incident", "substrate", "lit_side", "layers")
CORRECTIONS = ("obliquity", "stage_tilt", "compression", "shrinkage")
COMPARISON = ("scale", "quantity", "lab")
LIGHT = (
    "angle", "aperture", "polarisation", "wavelengths", "bandwidth", "illuminant", "observer", "draws", "seed",
)  # fmt: skip


def button(text: str, description: str, slot: object) -> QPushButton:
    """A push button with a description for screen readers and as a tooltip."""
    made = QPushButton(text)
    made.setAccessibleName(text.replace("&", ""))
    made.setAccessibleDescription(description)
    made.setToolTip(description)
    made.clicked.connect(slot)
    return made


def _row(*widgets: QWidget) -> QHBoxLayout:
    layout = QHBoxLayout()
    for widget in widgets:
        layout.addWidget(widget)
    return layout


def _group(title: str, *widgets: QWidget) -> QGroupBox:
    box = QGroupBox(title)
    layout = QVBoxLayout(box)
    layout.setContentsMargins(4, 4, 4, 4)
    for widget in widgets:
        layout.addWidget(widget)
    return box


class SpecimenTab(QWidget):
    """Materials, lit side and corrections of the section."""

    changed = Signal()
    save_asked = Signal()
    load_asked = Signal()

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.stack = SettingsForm(PredictSettings, SPECIMEN)
        self.corrections = SettingsForm(MeasureSettings, CORRECTIONS)
        layout = QVBoxLayout(self)
        layout.addWidget(_group("Layers and what surrounds them", self.stack))
        layout.addWidget(_group("How the section distorts what it shows", self.corrections))
        save = button("Save settings…", "Save materials, light, corrections and comparison in a file", self._save)
        load = button("Load settings…", "Read settings that were saved", self._load)
        layout.addLayout(_row(save, load))
        layout.addStretch(1)
        self.stack.changed.connect(self.changed)
        self.corrections.changed.connect(self.changed)

    def _save(self) -> None:
        self.save_asked.emit()

    def _load(self) -> None:
        self.load_asked.emit()


class LightTab(QWidget):
    """Conditions of the light, the observed spectrum and how it is compared."""

    changed = Signal()
    observed_asked = Signal()
    observed_dropped = Signal()

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.conditions = SettingsForm(PredictSettings, LIGHT)
        self.comparison = SettingsForm(CompareSettings, COMPARISON)
        self.observed = QLabel("no observed spectrum")
        self.observed.setAccessibleName("Observed spectrum")
        self.observed.setWordWrap(True)
        load = button("Load observed spectrum…", "Show a measured spectrum beside the predicted one", self._ask)
        drop = button("Leave it out", "Take the observed spectrum away", self._drop)
        layout = QVBoxLayout(self)
        layout.addWidget(_group("Observed light", self.observed, _held(_row(load, drop)), self.comparison))
        layout.addWidget(_group("Conditions of the prediction", self.conditions))
        layout.addStretch(1)
        self.conditions.changed.connect(self.changed)
        self.comparison.changed.connect(self.changed)

    def _ask(self) -> None:
        self.observed_asked.emit()

    def _drop(self) -> None:
        self.observed_dropped.emit()


def _held(layout: QHBoxLayout) -> QWidget:
    holder = QWidget()
    layout.setContentsMargins(0, 0, 0, 0)
    holder.setLayout(layout)
    return holder


class ThicknessLegend(QWidget):
    """Colour scale of the traced boundaries, in nm."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._limits: tuple[float, float] | None = None
        self._stops: list[tuple[float, QColor]] = []
        self.setMinimumHeight(34)
        self.setAccessibleName("Legend: layer thickness by colour")
        self.setVisible(False)

    def set_limits(self, limits: tuple[float, float] | None) -> None:
        """Show the scale between two thicknesses, or nothing."""
        self._limits = limits
        if limits is not None and not self._stops:
            from napari.utils.colormaps import ensure_colormap

            table = ensure_colormap(colours.THICKNESS_COLOURMAP).map([i / 16 for i in range(17)])
            self._stops = [(i / 16, QColor.fromRgbF(*map(float, row[:3]))) for i, row in enumerate(table)]
        self.setVisible(limits is not None)
        if limits is not None:
            self.setAccessibleDescription(f"from {limits[0]:.3g} nm to {limits[1]:.3g} nm")
        self.update()

    def paintEvent(self, event: QPaintEvent) -> None:
        """Paint the scale with its ends and middle."""
        if self._limits is None:
            return
        painter = QPainter(self)
        painter.setPen(self.palette().windowText().color())
        width = self.width() - 2
        gradient = QLinearGradient(1, 0, 1 + width, 0)
        for place, colour in self._stops:
            gradient.setColorAt(place, colour)
        painter.fillRect(1, 1, width, 12, gradient)
        low, high = self._limits
        places = ((low, Qt.AlignmentFlag.AlignLeft), ((low + high) / 2, Qt.AlignmentFlag.AlignHCenter),
                  (high, Qt.AlignmentFlag.AlignRight))  # fmt: skip
        for value, side in places:
            painter.drawText(self.rect().adjusted(1, 14, -1, 0), side, f"{value:.3g} nm")
        painter.end()


class LayersTab(QWidget):
    """Whole-field measurement, the clicked layer, and corrections of boundaries by hand."""

    measure_asked = Signal()
    cancel_asked = Signal()
    boundary_chosen = Signal(int)
    move_asked = Signal(int, float)
    delete_asked = Signal(int)
    restore_asked = Signal(int)
    add_asked = Signal(float)

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        layout = QVBoxLayout(self)
        self.measure = button("&Measure the whole field", "Trace every layer in the background", self._ask)
        self.cancel = button("Cancel", "Stop the measurement that is running", self._stop)
        self.cancel.setEnabled(False)
        layout.addLayout(_row(self.measure, self.cancel))
        self.progress = QProgressBar()
        self.progress.setAccessibleName("Progress of the measurement")
        self.progress.setVisible(False)
        layout.addWidget(self.progress)
        self.legend = ThicknessLegend()
        layout.addWidget(self.legend)
        self.clicked_layer = QLabel("Click a layer in the image to read it here.")
        self.clicked_layer.setAccessibleName("The layer that was clicked")
        self.clicked_layer.setWordWrap(True)
        self.clicked_layer.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        layout.addWidget(self.clicked_layer)
        layout.addWidget(self._make_corrections())
        layout.addStretch(1)

    def _make_corrections(self) -> QGroupBox:
        box = QGroupBox("Correct a boundary by hand")
        grid = QGridLayout(box)
        self.boundary = QSpinBox()
        self.boundary.setAccessibleName("Boundary to correct")
        self.boundary.setRange(0, 0)
        self.shift = _length("Shift along the depth")
        self.depth = _length("Depth of the boundary to add")
        self.edit_state = QLabel("no corrections")
        self.edit_state.setAccessibleName("Corrections made")
        self.edit_state.setWordWrap(True)
        rows = (
            ("&Boundary", self.boundary, (
                button("Delete", "Leave this boundary out", self._delete),
                button("As found", "Take back what was done to this boundary", self._restore),
            )),
            ("Shift", self.shift, (button("Move", "Move this boundary along the depth", self._move),)),
            ("Depth", self.depth, (button("Add", "Add a boundary at this depth", self._add),)),
        )  # fmt: skip
        for number, (title, widget, buttons) in enumerate(rows):
            label = QLabel(title)
            label.setBuddy(widget)
            grid.addWidget(label, number, 0)
            grid.addWidget(widget, number, 1)
            grid.addWidget(_held(_row(*buttons)), number, 2)
        grid.addWidget(self.edit_state, len(rows), 0, 1, 3)
        hint = QLabel("Or drag the thick line in the profile; a click in the profile fills in the depth.")
        hint.setWordWrap(True)
        grid.addWidget(hint, len(rows) + 1, 0, 1, 3)
        self.boundary.valueChanged.connect(self.boundary_chosen)
        return box

    def set_busy(self, busy: bool) -> None:
        """Show that the field is being measured, or no longer."""
        self.measure.setEnabled(not busy)
        self.cancel.setEnabled(busy)
        self.progress.setVisible(busy)
        if busy:
            self.progress.setRange(0, 0)
            self.progress.setFormat("starting")

    def show_progress(self, what: str, fraction: float | None) -> None:
        """Show how far the measurement is."""
        self.progress.setRange(0, 0 if fraction is None else 100)
        if fraction is not None:
            self.progress.setValue(round(100 * fraction))
        self.progress.setFormat(f"{what} %p %" if fraction is not None else what)
        self.progress.setAccessibleDescription(what)

    def set_boundaries(self, count: int) -> None:
        """Allow boundaries 0 to count - 1 to be chosen."""
        self.boundary.blockSignals(True)
        self.boundary.setRange(0, max(count - 1, 0))
        self.boundary.blockSignals(False)

    def _ask(self) -> None:
        self.measure_asked.emit()

    def _stop(self) -> None:
        self.cancel_asked.emit()

    def _move(self) -> None:
        self.move_asked.emit(self.boundary.value(), self.shift.value())

    def _delete(self) -> None:
        self.delete_asked.emit(self.boundary.value())

    def _restore(self) -> None:
        self.restore_asked.emit(self.boundary.value())

    def _add(self) -> None:
        self.add_asked.emit(self.depth.value())


def _length(name: str) -> QDoubleSpinBox:
    box = QDoubleSpinBox()
    box.setRange(-1e7, 1e7)
    box.setDecimals(2)
    box.setSuffix(" nm")
    box.setAccessibleName(name)
    return box


class KeptTab(QWidget):
    """Table of kept results, with their names and notes, and what can be done with them."""

    show_asked = Signal(int)
    remove_asked = Signal(int)
    renamed = Signal(int, str, str)
    copy_asked = Signal(int)
    export_asked = Signal()
    save_asked = Signal()
    open_asked = Signal()

    HEADERS = ("Name", "Note", "Image", "Period", "Dark", "Bright", "Peak", "Colour")

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.table = QTableWidget(0, len(self.HEADERS))
        self.table.setHorizontalHeaderLabels(self.HEADERS)
        self.table.setAccessibleName("Kept results")
        self.table.setSelectionBehavior(QTableWidget.SelectionBehavior.SelectRows)
        self.table.setTabKeyNavigation(False)
        self.table.horizontalHeader().setSectionResizeMode(QHeaderView.ResizeMode.ResizeToContents)
        self.table.verticalHeader().setVisible(False)
        self.table.setMinimumHeight(120)
        self.table.itemChanged.connect(self._on_item_changed)
        layout = QVBoxLayout(self)
        layout.addWidget(self.table)
        show = button("Show", "Show the selected result again, with its image and line", self._show)
        copy = button("Copy command", "Copy the command-line call that repeats the selected result", self._copy)
        remove = button("Remove", "Take the selected result out of the table", self._remove)
        export = button("Export…", "Write the same documents and figures as the command line", self._export)
        save = button("Save work…", "Save images, lines, settings and results in a folder", self._save)
        reopen = button("Open work…", "Open work that was saved", self._open)
        layout.addLayout(_row(show, copy, remove))
        layout.addLayout(_row(export, save, reopen))

    def show_rows(self, kept: Sequence[Kept]) -> None:
        """Show these results."""
        self.table.blockSignals(True)
        self.table.setRowCount(len(kept))
        for row, item in enumerate(kept):
            for column, text in enumerate(_cells(item)):
                cell = QTableWidgetItem(text)
                if column > 1:
                    cell.setFlags(cell.flags() & ~Qt.ItemFlag.ItemIsEditable)
                if self.HEADERS[column] == "Colour" and text.startswith("#"):
                    cell.setData(Qt.ItemDataRole.DecorationRole, QColor(text))
                self.table.setItem(row, column, cell)
        self.table.blockSignals(False)

    def selected(self) -> int:
        """The selected row, or -1."""
        return self.table.currentRow()

    def _on_item_changed(self, item: QTableWidgetItem) -> None:
        row = item.row()
        self.renamed.emit(row, self.table.item(row, 0).text(), self.table.item(row, 1).text())

    def _show(self) -> None:
        self.show_asked.emit(self.selected())

    def _copy(self) -> None:
        self.copy_asked.emit(self.selected())

    def _remove(self) -> None:
        self.remove_asked.emit(self.selected())

    def _export(self) -> None:
        self.export_asked.emit()

    def _save(self) -> None:
        self.save_asked.emit()

    def _open(self) -> None:
        self.open_asked.emit()


def _cells(kept: Kept) -> tuple[str, ...]:
    from pathlib import Path

    from layerscan_napari.desk import table_row

    row = table_row(kept)
    edited = " (edited)" if row["edited"] else ""
    return (
        kept.name,
        kept.note,
        Path(row["image"] or "array").name,
        value_with_u(row["period_nm"], row["u_period_nm"]) + edited,
        value_with_u(row["dark_nm"], row["u_dark_nm"]),
        value_with_u(row["bright_nm"], row["u_bright_nm"]),
        value_with_u(row["peak_nm"], row["u_peak_nm"]),
        row["srgb"] or "–",
    )
