"""The numbers beside the plots: period, thicknesses, peak, colour, agreement."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import Qt
from qtpy.QtWidgets import QFrame, QGridLayout, QHBoxLayout, QLabel, QWidget

from layerscan_napari.traces import value_with_u

if TYPE_CHECKING:
    from layerscan.records import Average, Colour, Comparison, Measurement, Prediction

    from layerscan_napari.compute import Result

_AVERAGES = {"period": "Lamellar period", "dark": "Dark layers", "middle": "Middle layers", "bright": "Bright layers"}
_OTHERS = {"peak": "Reflectance peak", "colour": "Predicted colour", "agreement": "Observed light"}
_HEADS = ("", "mean ± u", "spread", "n")


class Readout(QWidget):
    """Labels that can be read aloud and copied."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        grid = QGridLayout(self)
        grid.setContentsMargins(2, 2, 2, 2)
        grid.setVerticalSpacing(2)
        grid.setHorizontalSpacing(12)
        grid.setColumnStretch(1, 1)
        self.values: dict[str, QLabel] = {}
        self._spreads: dict[str, QLabel] = {}
        self._counts: dict[str, QLabel] = {}
        self._titles: dict[str, QLabel] = {}
        for column, text in enumerate(_HEADS):
            grid.addWidget(QLabel(text), 0, column)
        self.setToolTip(
            "u is the standard uncertainty of the mean (k = 1); spread is that between layers, noise removed; "
            "n counts whole periods or complete layers."
        )
        for row, (key, title) in enumerate(_AVERAGES.items(), 1):
            self._titles[key] = QLabel(title)
            self.values[key], self._spreads[key] = _label(title), _label(f"{title}: spread")
            self._counts[key] = _label(f"{title}: number")
            for column, label in enumerate(
                (self._titles[key], self.values[key], self._spreads[key], self._counts[key])
            ):
                grid.addWidget(label, row, column)
        self.swatch = QFrame()
        self.swatch.setFixedSize(40, 16)
        self.swatch.setAccessibleName("Swatch of the predicted colour")
        for row, (key, title) in enumerate(_OTHERS.items(), len(_AVERAGES) + 1):
            value = self.values[key] = _label(title)
            grid.addWidget(QLabel(title), row, 0)
            line = QHBoxLayout()
            if key == "colour":
                line.addWidget(self.swatch)
            line.addWidget(value, 1)
            grid.addLayout(line, row, 1, 1, 3)
        self._shown_colour: str | None = None
        self._show_middle(False)

    def show_result(self, result: Result) -> None:
        """Show what a result holds; parts that follow on release keep their last value, marked."""
        if "measure" not in result.following:
            self._show_measurement(result.measurement)
        else:
            self._mark(*_AVERAGES)
        if "predict" in result.following:
            self._mark("peak", "colour")
        else:
            self._show_prediction(result.prediction)
        if result.final:
            self._show_agreement(result.comparison)
        elif result.comparison is None:
            self._mark("agreement")

    def clear(self) -> None:
        """Show nothing."""
        self._show_measurement(None)
        self._show_prediction(None)
        self._show_agreement(None)

    def _show_measurement(self, m: Measurement | None) -> None:
        layered = m is not None and m.layered
        for key in _AVERAGES:
            average: Average | None = getattr(m, key) if m is not None and layered else None
            text = "–" if average is None else value_with_u(average.mean, average.u)
            if key == "period" and m is not None and average is None:
                text = "no period" if layered else "no layered structure found"
            self._set(self.values[key], text)
            spread = "" if average is None or average.sd is None else f"{average.sd:.3g} nm"
            self._set(self._spreads[key], spread)
            self._set(self._counts[key], "" if average is None else str(average.n))
        self._show_middle(m is not None and m.middle is not None)

    def _show_middle(self, shown: bool) -> None:
        if self._titles["middle"].isHidden() == shown:
            for labels in (self._titles, self.values, self._spreads, self._counts):
                labels["middle"].setVisible(shown)

    def _show_prediction(self, prediction: Prediction | None) -> None:
        if prediction is None:
            self._set(self.values["peak"], "–")
            self._set(self.values["colour"], "–")
            self._paint(None)
            return
        peak = max(prediction.peaks, key=lambda p: p.reflectance, default=None)
        if peak is None:
            self._set(self.values["peak"], "no peak in this range")
        else:
            order = "" if peak.order is None else f", order {peak.order}"
            place = value_with_u(peak.wavelength_nm, peak.u_wavelength_nm)
            self._set(self.values["peak"], f"{place}, R = {peak.reflectance:.2f}{order}")
        self._set(self.values["colour"], colour_in_words(prediction.colour))
        self._paint(prediction.colour.srgb)

    def _show_agreement(self, comparison: Comparison | None) -> None:
        label = self.values["agreement"]
        self._set(label, "–" if comparison is None else agreement_in_words(comparison))
        label.setToolTip("" if comparison is None else comparison.sentence)
        label.setAccessibleDescription("" if comparison is None else comparison.sentence)

    def _paint(self, srgb: str | None) -> None:
        if srgb != self._shown_colour:
            self._shown_colour = srgb
            fill = "transparent" if srgb is None else srgb
            self.swatch.setStyleSheet(f"background-color: {fill}; border: 1px solid palette(mid);")
            self.swatch.setAccessibleDescription("no colour" if srgb is None else srgb)

    @staticmethod
    def _set(label: QLabel, text: str) -> None:
        if label.text() != text:
            label.setText(text)

    def _mark(self, *keys: str) -> None:
        """Mark values that are not of the line as it is now; they follow when it is let go."""
        for key in keys:
            text = self.values[key].text()
            if text != "–" and not text.endswith("…"):
                self.values[key].setText(f"{text} …")


def _label(name: str) -> QLabel:
    label = QLabel("–")
    label.setAccessibleName(name)
    label.setTextInteractionFlags(
        Qt.TextInteractionFlag.TextSelectableByMouse | Qt.TextInteractionFlag.TextSelectableByKeyboard
    )
    return label


def agreement_in_words(comparison: Comparison) -> str:
    """The conclusion and the difference of the peaks; the whole sentence is shown with the doubts."""
    words = {"explains": "explained", "contradicts": "contradicted", "cannot_tell": "cannot tell"}
    text = words[comparison.agreement.conclusion]
    if comparison.peak_difference_nm is not None:
        text += f": peak {value_with_u(comparison.peak_difference_nm, comparison.u_peak_difference_nm)} off"
    elif comparison.delta_e00 is not None:
        text += f": colours ΔE00 {comparison.delta_e00:.2g} apart"
    return text


def colour_in_words(colour: Colour) -> str:
    """Hexadecimal sRGB (≈: the nearest that can be shown) and the colour difference that holds 95 % of the draws."""
    about = "" if colour.in_gamut else "≈ "
    spread = "" if colour.delta_e00_95 is None else f", 95 % in {colour.delta_e00_95:.2g} ΔE00"
    return f"{about}{colour.srgb}{spread}"
