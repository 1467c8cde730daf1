"""The numbers beside the plots: period, thicknesses, peak, colour, agreement."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import Qt
from qtpy.QtWidgets import QFrame, QGridLayout, QHBoxLayout, QLabel, QWidget

from layerscan_napari.traces import average_in_words, value_with_u

if TYPE_CHECKING:
    from layerscan.records import Colour, Measurement, Prediction

    from layerscan_napari.compute import Result

_ROWS = {
    "period": "Lamellar period",
    "dark": "Dark layers",
    "bright": "Bright layers",
    "peak": "Reflectance peak",
    "colour": "Predicted colour",
    "agreement": "Observed light",
}


class Readout(QWidget):
    """Labels that can be read aloud and copied."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        layout = QGridLayout(self)
        layout.setContentsMargins(2, 2, 2, 2)
        layout.setVerticalSpacing(2)
        layout.setColumnStretch(1, 1)
        self.values: dict[str, QLabel] = {}
        for row, (key, title) in enumerate(_ROWS.items()):
            value = QLabel("–")
            value.setAccessibleName(title)
            value.setTextInteractionFlags(
                Qt.TextInteractionFlag.TextSelectableByMouse | Qt.TextInteractionFlag.TextSelectableByKeyboard
            )
            value.setWordWrap(key == "agreement")
            layout.addWidget(QLabel(title), row, 0, Qt.AlignmentFlag.AlignTop)
            if key == "colour":
                self.swatch = QFrame()
                self.swatch.setFixedSize(44, 16)
                self.swatch.setAccessibleName("Swatch of the predicted colour")
                line = QHBoxLayout()
                line.addWidget(self.swatch)
                line.addWidget(value, 1)
                layout.addLayout(line, row, 1)
            else:
                layout.addWidget(value, row, 1)
            self.values[key] = value
        caption = QLabel("± is one standard uncertainty (k = 1); n counts whole periods or complete layers.")
        caption.setWordWrap(True)
        layout.addWidget(caption, len(_ROWS), 0, 1, 2)
        self._shown_colour: str | None = None

    def show_result(self, result: Result) -> None:
        """Show what a result holds; parts that follow on release keep their last value, marked."""
        if "measure" not in result.following:
            self._show_measurement(result.measurement)
        else:
            self._mark("period", "dark", "bright")
        if "predict" in result.following:
            self._mark("peak", "colour")
        else:
            self._show_prediction(result.prediction)
        if result.final:
            self._set("agreement", result.comparison.sentence if result.comparison is not None else "–")
        elif result.comparison is None and self.values["agreement"].text() != "–":
            self._mark("agreement")

    def clear(self) -> None:
        """Show nothing."""
        self._show_measurement(None)
        self._show_prediction(None)
        self._set("agreement", "–")

    def _show_measurement(self, m: Measurement | None) -> None:
        self._set("period", average_in_words(m.period) if m is not None and m.layered else _nothing_found(m))
        self._set("dark", average_in_words(m.dark) if m is not None else "–")
        self._set("bright", average_in_words(m.bright) if m is not None else "–")

    def _show_prediction(self, prediction: Prediction | None) -> None:
        if prediction is None:
            self._set("peak", "–")
            self._set("colour", "–")
            self._paint(None)
            return
        peak = max(prediction.peaks, key=lambda p: p.reflectance, default=None)
        if peak is None:
            self._set("peak", "no peak in this range")
        else:
            order = "" if peak.order is None else f", order {peak.order}"
            height = f", R = {peak.reflectance:.2f}"
            self._set("peak", value_with_u(peak.wavelength_nm, peak.u_wavelength_nm) + height + order)
        self._set("colour", colour_in_words(prediction.colour))
        self._paint(prediction.colour.srgb)

    def _paint(self, srgb: str | None) -> None:
        if srgb != self._shown_colour:
            self._shown_colour = srgb
            fill = "transparent" if srgb is None else srgb
            self.swatch.setStyleSheet(f"background-color: {fill}; border: 1px solid palette(mid);")
            self.swatch.setAccessibleDescription("no colour" if srgb is None else srgb)

    def _set(self, key: str, text: str) -> None:
        label = self.values[key]
        if label.text() != text:
            label.setText(text)

    def _mark(self, *keys: str) -> None:
        for key in keys:
            text = self.values[key].text()
            if text != "–" and not text.endswith("…"):
                self.values[key].setText(text + " …")


def colour_in_words(colour: Colour) -> str:
    """Hexadecimal sRGB, spread over the draws, and whether a screen can show it."""
    spread = "" if colour.delta_e00_95 is None else f", 95 % within ΔE00 {colour.delta_e00_95:.2g}"
    outside = "" if colour.in_gamut else ", outside sRGB: nearest shown"
    return f"{colour.srgb}{spread}{outside}"


def _nothing_found(m: Measurement | None) -> str:
    return "–" if m is None else "no layered structure found"
