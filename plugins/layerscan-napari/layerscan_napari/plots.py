"""The three live plots: line profile with boundaries, thickness against layer number, spectrum.

Ranges are fixed and change only when the data leave them or shrink far inside them: automatic ranges on every refresh
cost three times as much as the drawing (pyqtgraph).
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
import pyqtgraph as pg
from qtpy.QtCore import Qt, Signal
from qtpy.QtGui import QFont
from qtpy.QtWidgets import QSizePolicy, QVBoxLayout, QWidget

if TYPE_CHECKING:
    from collections.abc import Sequence

    from layerscan.records import FloatArray, Measurement, Prediction, Spectrum

    from layerscan_napari.colours import PlotColours

_NOTHING = np.zeros(0)


class LivePlots(QWidget):
    """Profile, thicknesses and spectrum, one below the other."""

    boundary_moved = Signal(float)
    depth_picked = Signal(float)

    def __init__(self, colours: PlotColours, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._ranges: dict[tuple[str, str], tuple[float, float]] = {}
        self.profile = _plot("Line profile", "Intensity of the line profile against depth", "depth / nm", "intensity")
        self.thickness = _plot("Layer thickness", "Thickness against layer number", "layer", "thickness / nm")
        self.spectrum = _plot("Spectrum", "Predicted and observed spectrum", "wavelength / nm", "reflectance")
        layout = QVBoxLayout(self)
        layout.setContentsMargins(0, 0, 0, 0)
        layout.setSpacing(2)
        for plot in (self.profile, self.thickness, self.spectrum):
            layout.addWidget(plot)
        self._profile_curve = _curve(self.profile)
        self._boundary_marks = _curve(self.profile, connect="pairs")
        self._earlier_marks = _curve(self.profile, connect="pairs")
        self._bars = {phase: _curve(self.thickness, connect="pairs") for phase in ("dark", "bright", "other")}
        self._heads = {
            phase: pg.ScatterPlotItem(symbol=symbol, size=7, pen=None)
            for phase, symbol in (("dark", "o"), ("bright", "s"), ("other", "t"))
        }
        for heads in self._heads.values():
            self.thickness.addItem(heads)
        self._lower, self._upper = _curve(self.spectrum), _curve(self.spectrum)
        for edge in (self._lower, self._upper):
            edge.setPen(None)
        self._band = pg.FillBetweenItem(self._lower, self._upper)
        self.spectrum.addItem(self._band)
        self._predicted = _curve(self.spectrum)
        self._observed = _curve(self.spectrum)
        self._handle = pg.InfiniteLine(angle=90, movable=True)
        self._handle.setVisible(False)
        self._handle.sigPositionChangeFinished.connect(self._report_move)
        self.profile.addItem(self._handle)
        self.profile.scene().sigMouseClicked.connect(self._report_click)
        self.set_colours(colours)

    def set_colours(self, colours: PlotColours) -> None:
        """Redraw in the colours of a theme."""
        self._colours = colours
        for plot in (self.profile, self.thickness, self.spectrum):
            plot.setBackground(colours.background)
            for side in ("bottom", "left"):
                axis = plot.getAxis(side)
                axis.setPen(colours.grid)
                axis.setTextPen(colours.text)
        self._profile_curve.setPen(pg.mkPen(colours.profile, width=1))
        self._boundary_marks.setPen(pg.mkPen(colours.boundary, width=1))
        self._earlier_marks.setPen(pg.mkPen(colours.grid, width=1, style=Qt.PenStyle.DotLine))
        self._handle.setPen(pg.mkPen(colours.observed, width=3))
        self._handle.setHoverPen(pg.mkPen(colours.text, width=3))
        for phase in ("dark", "bright", "other"):
            colour = getattr(colours, phase)
            self._bars[phase].setPen(pg.mkPen(colour, width=1))
            self._heads[phase].setBrush(pg.mkBrush(colour))
        self._predicted.setPen(pg.mkPen(colours.predicted, width=2))
        self._observed.setPen(pg.mkPen(colours.observed, width=2, style=Qt.PenStyle.DashLine))
        fill = pg.mkColor(colours.predicted)
        fill.setAlpha(70)
        self._band.setBrush(pg.mkBrush(fill))

    # --- data ---------------------------------------------------------------------------------------------------------

    def show_measurement(self, measurement: Measurement | None, earlier_nm: Sequence[float] = ()) -> None:
        """Profile, boundaries and thicknesses; ``earlier_nm`` are the boundaries before corrections, dotted."""
        profile = None if measurement is None else measurement.profile
        if measurement is None or profile is None:
            self._profile_curve.setData(_NOTHING, _NOTHING)
            self._boundary_marks.setData(_NOTHING, _NOTHING)
            self._earlier_marks.setData(_NOTHING, _NOTHING)
        else:
            low, high = _limits(profile.intensity)
            self._profile_curve.setData(profile.depth_nm, profile.intensity)
            self._boundary_marks.setData(*_posts([b.depth_nm for b in measurement.boundaries], low, high))
            self._keep_range(self.profile, "x", float(profile.depth_nm[0]), float(profile.depth_nm[-1]))
            self._keep_range(self.profile, "y", low, high)
            self._earlier_marks.setData(*_posts(earlier_nm, low, high))
        self._show_thickness(measurement)

    def show_profile(self, distance_nm: FloatArray, intensity: FloatArray) -> None:
        """A profile alone, while its boundaries follow later; it begins where the one before began."""
        before = self._profile_curve.getData()[0]
        start = float(before[0]) if before is not None and len(before) else 0.0
        depth = distance_nm + start
        self._profile_curve.setData(depth, intensity)
        self._boundary_marks.setData(_NOTHING, _NOTHING)
        self._earlier_marks.setData(_NOTHING, _NOTHING)
        self._keep_range(self.profile, "x", float(depth[0]), float(depth[-1]))
        self._keep_range(self.profile, "y", *_limits(intensity))

    def _show_thickness(self, measurement: Measurement | None) -> None:
        layers = () if measurement is None else measurement.layers
        groups: dict[str, list[tuple[float, float, float]]] = {"dark": [], "bright": [], "other": []}
        for layer in layers:
            if layer.complete:
                group = groups[layer.phase if layer.phase in groups else "other"]
                group.append((layer.index, layer.thickness_nm, layer.u_nm or 0.0))
        for phase, points in groups.items():
            table = np.array(points, dtype=float).reshape(-1, 3)
            self._heads[phase].setData(table[:, 0], table[:, 1])
            ends = np.stack([table[:, 1] - table[:, 2], table[:, 1] + table[:, 2]], axis=1)
            self._bars[phase].setData(np.repeat(table[:, 0], 2), ends.ravel())
        shown = [layer.thickness_nm for layer in layers if layer.complete]
        if shown:
            self._keep_range(self.thickness, "x", -0.5, layers[-1].index + 0.5)
            self._keep_range(self.thickness, "y", 0.0, max(shown))

    def show_prediction(self, prediction: Prediction | None) -> None:
        """Predicted spectrum with its 95 % band where there is one."""
        if prediction is None:
            for curve in (self._predicted, self._lower, self._upper):
                curve.setData(_NOTHING, _NOTHING)
            self._band.setVisible(False)
            return
        light = prediction.reflectance
        self._predicted.setData(light.wavelength_nm, light.value)
        top = light.value
        if light.lower is not None and light.upper is not None:
            top = light.upper
            self._lower.setData(light.wavelength_nm, light.lower)
            self._upper.setData(light.wavelength_nm, light.upper)
        self._band.setVisible(top is not light.value)
        self._keep_range(self.spectrum, "x", float(light.wavelength_nm[0]), float(light.wavelength_nm[-1]))
        self._keep_range(self.spectrum, "y", 0.0, float(np.nanmax(top)))

    def show_observed(self, observed: Spectrum | None) -> None:
        """Observed spectrum, dashed."""
        if observed is None:
            self._observed.setData(_NOTHING, _NOTHING)
            return
        self._observed.setData(observed.wavelength_nm, observed.value)
        self._keep_range(self.spectrum, "y", 0.0, float(np.nanmax(observed.value)))

    def set_following(self, parts: tuple[str, ...]) -> None:
        """Dim the plots whose parts follow on release."""
        for part, plot in (("measure", self.thickness), ("predict", self.spectrum)):
            title = "follows when you let go" if part in parts else None
            plot.setTitle(title, color=self._colours.text, size="8pt")

    # --- a boundary in hand -------------------------------------------------------------------------------------------

    def hold_boundary(self, depth_nm: float | None) -> None:
        """Show the handle of a boundary, or hide it."""
        self._handle.setVisible(depth_nm is not None)
        if depth_nm is not None:
            self._handle.blockSignals(True)
            self._handle.setValue(depth_nm)
            self._handle.blockSignals(False)

    def _report_move(self) -> None:
        self.boundary_moved.emit(float(self._handle.value()))

    def _report_click(self, event: object) -> None:
        position = event.scenePos()  # type: ignore[attr-defined]
        if self.profile.plotItem.vb.sceneBoundingRect().contains(position):
            self.depth_picked.emit(float(self.profile.plotItem.vb.mapSceneToView(position).x()))

    # --- ranges -------------------------------------------------------------------------------------------------------

    def _keep_range(self, plot: pg.PlotWidget, axis: str, low: float, high: float) -> None:
        """Change a range only when the data leave it or fill less than half of it."""
        if not (math.isfinite(low) and math.isfinite(high)) or high <= low:
            return
        key = (plot.accessibleName(), axis)
        held = self._ranges.get(key)
        if held and held[0] <= low and high <= held[1] and (high - low) > 0.5 * (held[1] - held[0]):
            return
        spare = 0.12 * (high - low)
        new = (low if low == 0.0 else low - spare, high + spare)
        self._ranges[key] = new
        (plot.setXRange if axis == "x" else plot.setYRange)(*new, padding=0)

    def forget_ranges(self) -> None:
        """Fit the ranges anew with the next data."""
        self._ranges.clear()


def _plot(name: str, description: str, bottom: str, left: str) -> pg.PlotWidget:
    plot = pg.PlotWidget(enableMenu=False)
    plot.setAccessibleName(name)
    plot.setAccessibleDescription(description)
    plot.hideButtons()
    plot.setMinimumSize(240, 104)
    plot.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Expanding)
    plot.getAxis("bottom").setLabel(bottom)
    plot.getAxis("left").setLabel(left)
    plot.getAxis("left").setWidth(54)
    for side in ("bottom", "left"):
        axis = plot.getAxis(side)
        axis.enableAutoSIPrefix(False)
        axis.setStyle(tickFont=_small(plot), tickTextOffset=2, autoExpandTextSpace=False)
        axis.label.setFont(_small(plot))
    plot.disableAutoRange()
    return plot


def _small(plot: pg.PlotWidget) -> QFont:
    font = QFont(plot.font())
    font.setPointSizeF(max(7.0, 0.85 * font.pointSizeF()))
    return font


def _curve(plot: pg.PlotWidget, *, connect: str = "all") -> pg.PlotCurveItem:
    curve = pg.PlotCurveItem(_NOTHING, _NOTHING, connect=connect, skipFiniteCheck=False)
    plot.addItem(curve)
    return curve


def _limits(values: FloatArray) -> tuple[float, float]:
    low, high = float(np.nanmin(values)), float(np.nanmax(values))
    return (low, high) if high > low else (low - 0.5, high + 0.5)


def _posts(depths: Sequence[float], low: float, high: float) -> tuple[FloatArray, FloatArray]:
    """Vertical strokes at the depths, as the pairs of points that ``connect="pairs"`` joins."""
    return np.repeat(np.array(depths, dtype=float), 2), np.tile([low, high], len(depths))
