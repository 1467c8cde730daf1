"""The panel in a real napari window: opened, drawn on and dragged by the mouse, measured, corrected, kept, reopened."""

import json
import os
import shlex
import sys
from dataclasses import replace
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

import numpy as np
import pytest
from drawn_sections import PERIOD_PX, PIXEL_NM, draw_section

if sys.platform == "linux" and not (os.environ.get("DISPLAY") or os.environ.get("WAYLAND_DISPLAY")):
    pytest.skip("no display: napari needs one (run under Xvfb, such as 'xvfb-run -a pytest')", allow_module_level=True)
try:
    version("layerscan-napari")
except PackageNotFoundError:
    pytest.skip("the plugin is not installed (see its README)", allow_module_level=True)
pytest.importorskip("napari", reason="napari is not installed (see the plugin's README)")
pytest.importorskip("pytestqt", reason="pytest-qt is not installed (see the plugin's README)")
pytest.importorskip("qtpy.QtWidgets", reason="no Qt binding is installed (see the plugin's README)")

from qtpy.QtCore import QEvent, QPoint, Qt
from qtpy.QtGui import QMouseEvent
from qtpy.QtWidgets import QAbstractButton, QApplication, QComboBox, QLabel, QLineEdit, QSpinBox

from layerscan_napari import compute, overlays, worker
from layerscan_napari.traces import value_with_u

LONG_MS = 120_000  # the first line compiles the kernels


class Mouse:
    """Moves, presses and releases at places of the image, as a hand does."""

    def __init__(self, viewer, layer):
        self.canvas = viewer.window._qt_viewer.canvas
        self.native = self.canvas.native
        self.layer = layer
        self.held = Qt.MouseButton.NoButton

    def place(self, row, column):
        """Canvas position of a pixel, by inverting the canvas' own map at three points."""
        view = self.canvas.view
        origin, right, down = (
            np.array(self.canvas._map_canvas2world(p, view)[-2:]) for p in ((0, 0), (100, 0), (0, 100))
        )
        step = np.column_stack([(right - origin) / 100, (down - origin) / 100])
        x, y = np.linalg.solve(step, np.array(self.layer.data_to_world((row, column)))[-2:] - origin)
        return QPoint(round(x), round(y))

    def send(self, kind, row, column, button, held):
        """Send the event itself: QTest moves the X server's pointer instead, which knows of no pressed button."""
        at = self.place(row, column).toPointF()
        modifier = Qt.KeyboardModifier.NoModifier
        QApplication.sendEvent(self.native, QMouseEvent(kind, at, self.native.mapToGlobal(at), button, held, modifier))
        QApplication.processEvents()

    def press(self, row, column):
        self.held = Qt.MouseButton.LeftButton
        self.send(QEvent.Type.MouseButtonPress, row, column, self.held, self.held)

    def move(self, row, column):
        self.send(QEvent.Type.MouseMove, row, column, Qt.MouseButton.NoButton, self.held)

    def release(self, row, column):
        self.held = Qt.MouseButton.NoButton
        self.send(QEvent.Type.MouseButtonRelease, row, column, Qt.MouseButton.LeftButton, self.held)

    def drag(self, *places):
        self.move(*places[0])
        self.press(*places[0])
        for place in places[1:]:
            self.move(*place)
        self.release(*places[-1])


def document(measurement):
    from layerscan.documents import measurement_document

    return measurement_document(measurement)


def run_command_line(capsys, words):
    from layerscan.cli import run

    capsys.readouterr()
    assert run(words) == 0
    return json.loads(capsys.readouterr().out)


@pytest.fixture(scope="module")
def opened(window, section_file):
    viewer, _ = window
    viewer.open(str(section_file), plugin="layerscan-napari")
    viewer.reset_view()
    QApplication.processEvents()
    return window


@pytest.fixture(scope="module")
def lined(opened):
    """The panel with materials stated and everything compiled, and a finished line."""
    _, panel = opened
    panel.specimen.stack.show_settings(
        panel.specimen.stack.settings().model_copy(update={"dark": "n=1.56", "bright": "air"})
    )
    panel.light.conditions.show_settings(panel.light.conditions.settings().model_copy(update={"draws": 30}))
    with wait_for(panel.live.completed):
        panel.set_line((180.0, 20.0, 180.0, 460.0))
    return opened


def wait_for(signal, timeout=LONG_MS):
    from pytestqt.wait_signal import SignalBlocker

    blocker = SignalBlocker(timeout=timeout, raising=True)
    blocker.connect(signal)
    return blocker


# --- opening ---------------------------------------------------------------------------------------------------------


def test_that_an_image_opens_in_nm_and_the_panel_takes_it(opened, section_file):
    viewer, panel = opened
    layer = viewer.layers[section_file.stem]
    assert tuple(layer.scale) == pytest.approx((PIXEL_NM, PIXEL_NM))
    assert [f"{unit:~}" for unit in layer.units] == ["nm", "nm"]
    assert tuple(layer.axis_labels) == ("row", "column")
    assert panel.image is layer
    assert f"{PIXEL_NM:g} nm" in panel.image_info.text()
    assert panel.micrograph().load() is layer.data


def test_that_dropping_a_file_on_the_window_opens_it(opened, tmp_path):
    from drawn_sections import write_tiff
    from qtpy.QtCore import QMimeData, QUrl
    from qtpy.QtGui import QDropEvent

    viewer, panel = opened
    path = write_tiff(tmp_path / "dropped.tif", draw_section((64, 96)))
    mime = QMimeData()
    mime.setUrls([QUrl.fromLocalFile(str(path))])
    held = panel.image
    from napari.settings import get_settings

    get_settings().plugins.extension2reader = {"*.tif": "layerscan-napari"}
    event = QDropEvent(QPoint(50, 50).toPointF(), Qt.DropAction.CopyAction, mime, Qt.MouseButton.LeftButton,
                       Qt.KeyboardModifier.NoModifier)  # fmt: skip
    viewer.window._qt_viewer.dropEvent(event)
    assert "dropped" in viewer.layers
    assert panel.image_box.currentText() == held.name  # the image at hand stays at hand
    viewer.layers.remove("dropped")
    assert panel.image is held


# --- the live line ---------------------------------------------------------------------------------------------------


def test_that_a_line_is_drawn_with_the_mouse_and_then_dragged(lined, qtbot):
    viewer, panel = lined
    panel.draw_line()
    lines = panel.live.layer
    mouse = Mouse(viewer, lines)
    count = lines.nshapes
    with wait_for(panel.live.completed):
        mouse.drag((100, 60), (110, 200), (120, 300), (130, 420))
    assert lines.nshapes == count + 1
    assert lines.mode == "direct"  # so that its ends can be dragged at once
    first = panel.live.line
    assert first == pytest.approx((100, 60, 130, 420), abs=2)  # canvas pixels are 2 image pixels at most

    seen = []
    panel.live.refreshed.connect(seen.append)
    end = first[2:]
    mouse.move(*end)
    mouse.press(*end)
    for step in range(1, 6):
        mouse.move(end[0] + 10 * step, end[1] - 4 * step)
    assert len(seen) >= 4  # one refresh for each movement
    assert all(not result.final for result in seen)
    assert seen[-1].job.measure.line == panel.live.line
    assert panel.live.line[:2] == first[:2]
    assert panel.line_edit.text() == ",".join(f"{v:.10g}" for v in panel.live.line)
    with wait_for(panel.live.completed) as done:
        mouse.release(end[0] + 50, end[1] - 20)
    panel.live.refreshed.disconnect(seen.append)
    final = done.args[0]
    assert final.final
    assert final.job.measure.line == panel.live.line
    lines.remove_selected()
    qtbot.waitUntil(lambda: not panel.live.running, timeout=LONG_MS)


def test_that_everything_follows_the_drag_and_agrees_with_the_release(lined):
    viewer, panel = lined
    lines = panel.live.layer
    lines.selected_data = {0}
    panel.live.budget.budget_ms = 1e6  # this machine may be busy: the parts are what is tested here, not their speed
    with wait_for(panel.live.completed):
        panel.set_line((170.0, 20.0, 170.0, 440.0))
    mouse = Mouse(viewer, lines)
    lines.mode = "direct"
    mouse.move(170, 440)
    mouse.press(170, 440)
    with wait_for(panel.live.refreshed) as live:
        mouse.move(172, 455)
    with wait_for(panel.live.completed) as final:
        mouse.release(172, 455)
    live, final = live.args[0], final.args[0]
    assert live.following == ()
    assert document(live.measurement) == document(final.measurement)
    assert np.array_equal(live.prediction.reflectance.value, final.prediction.reflectance.value)
    assert live.prediction.colour.srgb == final.prediction.colour.srgb
    assert final.prediction.reflectance.lower is not None  # its uncertainty follows on release
    profile = panel.plots._profile_curve.getData()
    assert np.array_equal(profile[1], final.measurement.profile.intensity)
    spectrum = panel.plots._predicted.getData()
    assert np.array_equal(spectrum[1], final.prediction.reflectance.value)
    heads = sum(len(heads.getData()[0]) for heads in panel.plots._heads.values())
    assert heads == sum(layer.complete for layer in final.measurement.layers)
    marks = overlays.find_overlay(panel.viewer, panel.image, overlays.MARKS)
    assert len(marks.data) == len(final.measurement.boundaries)
    assert "±" in panel.readout.values["period"].text()
    assert final.prediction.colour.srgb in panel.readout.values["colour"].text()


def test_that_slow_parts_follow_on_release_and_are_seen_to(lined):
    viewer, panel = lined
    lines = panel.live.layer
    panel.live.budget.budget_ms = 0.0
    row, column = panel.live.line[2:]
    mouse = Mouse(viewer, lines)
    mouse.move(row, column)
    mouse.press(row, column)
    with wait_for(panel.live.refreshed) as live:
        mouse.move(row - 12, column)
    assert live.args[0].following == ("measure", "predict")
    assert np.array_equal(panel.plots._profile_curve.getData()[1], live.args[0].profile[1])  # the profile never waits
    assert panel.readout.values["period"].text().endswith("…")
    assert panel.plots.thickness.plotItem.titleLabel.isVisible()
    with wait_for(panel.live.completed):  # a line at rest is computed without being let go
        pass
    with wait_for(panel.live.completed):
        mouse.release(row - 12, column)
    assert "…" not in panel.readout.values["period"].text()
    assert not panel.plots.thickness.plotItem.titleLabel.isVisible()
    panel.live.budget.budget_ms = 1e6


def test_that_live_numbers_are_those_of_the_command_line(lined, capsys):
    _, panel = lined
    with wait_for(panel.live.completed) as done:
        panel.set_line((150.25, 31.5, 190.75, 447.0))
    result = done.args[0]
    panel.work.copy_shown()
    copied = QApplication.clipboard().text().splitlines()
    measured = run_command_line(capsys, [*shlex.split(copied[0])[1:-2], "--json"])
    mine = document(result.measurement)
    assert Path(measured["image"].pop("path")).name == Path(mine["image"].pop("path")).name
    assert measured == mine
    assert mine["period_nm"]["mean"] == pytest.approx(PERIOD_PX * PIXEL_NM, rel=0.02)


def test_that_the_whole_copied_chain_repeats_the_prediction(lined, capsys, tmp_path, monkeypatch):
    _, panel = lined
    with wait_for(panel.live.completed) as done:
        panel.set_line((150.0, 30.0, 150.0, 450.0))
    panel.work.copy_shown()
    monkeypatch.chdir(tmp_path)
    calls = [shlex.split(line)[1:] for line in QApplication.clipboard().text().splitlines()]
    assert [call[0] for call in calls] == ["measure", "predict"]
    run_command_line(capsys, [*calls[0], "--json"])
    predicted = run_command_line(capsys, [*calls[1], "--json"])
    assert predicted["reflectance"] == pytest.approx(done.args[0].prediction.reflectance.value.tolist(), rel=1e-6)
    assert predicted["colour"]["srgb"] == done.args[0].prediction.colour.srgb


def test_that_a_typed_line_and_width_are_measured(lined):
    _, panel = lined
    panel.line_edit.setText("200, 30, 200, 440")
    with wait_for(panel.live.completed) as done:
        panel.line_edit.editingFinished.emit()
    assert done.args[0].job.measure.line == (200.0, 30.0, 200.0, 440.0)
    panel.width_edit.setText("200 nm")
    with wait_for(panel.live.completed) as done:
        panel.width_edit.editingFinished.emit()
    assert done.args[0].job.measure.width == "200 nm"
    assert panel.live.layer.edge_width[0] == pytest.approx(40)  # the band is drawn as wide as it is averaged
    panel.width_edit.setText("20")
    with wait_for(panel.live.completed):
        panel.width_edit.editingFinished.emit()


def test_that_settings_reach_the_numbers(lined):
    _, panel = lined
    form = panel.specimen.corrections
    plain = panel.shown.measurement.period.mean
    form.widget("obliquity").setText("60 deg")
    with wait_for(panel.live.completed) as done:
        form.widget("obliquity").editingFinished.emit()
    assert done.args[0].measurement.period.mean == pytest.approx(plain * 0.5, rel=1e-6)  # cos 60 deg
    form.widget("obliquity").setText("60 parsec")
    form.widget("obliquity").editingFinished.emit()
    assert "60 parsec" in form.problem.text()
    assert form.settings().obliquity == "60 deg"  # what was valid stays
    form.widget("obliquity").setText("")
    with wait_for(panel.live.completed):
        form.widget("obliquity").editingFinished.emit()
    box = panel.specimen.stack.widget("lit_side")
    box.setCurrentIndex(box.findData("end"))
    with wait_for(panel.live.completed) as done:
        box.activated.emit(box.currentIndex())
    assert done.args[0].prediction.settings["lit_side"] == "end"


def test_that_an_observed_spectrum_is_shown_and_compared(lined, observed_file):
    _, panel = lined
    with wait_for(panel.live.completed) as done:
        panel.work.load_observed(observed_file)
    assert done.args[0].comparison is not None
    comparison = done.args[0].comparison
    assert f"peak {value_with_u(comparison.peak_difference_nm, comparison.u_peak_difference_nm)}" in (
        panel.readout.values["agreement"].text()
    )
    assert panel.readout.values["agreement"].accessibleDescription() == comparison.sentence
    assert panel.doubts.toPlainText().startswith(comparison.sentence)
    assert len(panel.plots._observed.getData()[0]) == 61
    with wait_for(panel.live.completed) as done:
        panel.work.drop_observed()
    assert done.args[0].comparison is None


def test_that_a_boundary_of_a_line_is_corrected_by_its_handle(lined):
    _, panel = lined
    before = panel.shown.measurement
    panel.layers.boundary.setValue(3)
    depth = before.boundaries[3].depth_nm
    assert panel.plots._handle.value() == pytest.approx(depth)
    with wait_for(panel.live.completed) as done:
        panel.plots._handle.setValue(depth + 6)
        panel.plots._handle.sigPositionChangeFinished.emit(panel.plots._handle)
    result = done.args[0]
    assert result.job.measure.edits == ("move 3 6 nm",)
    assert document(result.unedited) == document(before)
    assert "edited_by_hand" in result.measurement.flags
    assert "move 3 6 nm" in panel.layers.edit_state.text()
    with wait_for(panel.live.completed) as done:
        panel.layers.restore_asked.emit(3)
    assert done.args[0].unedited is None
    assert document(done.args[0].measurement) == document(before)


# --- the whole field -------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def measured(lined):
    _, panel = lined
    with wait_for(panel.field.shown):
        panel.layers.measure.click()
    return lined


def test_that_the_field_is_measured_and_drawn_by_thickness(measured):
    viewer, panel = measured
    result = panel.shown
    assert result.job.measure.line is None
    assert result.measurement.period.mean == pytest.approx(PERIOD_PX * PIXEL_NM, rel=0.02)
    layer = overlays.find_overlay(viewer, panel.image, overlays.TRACES)
    assert set(layer.features["boundary"]) == {b.index for b in result.measurement.boundaries if b.trace is not None}
    assert [f"{unit:~}" for unit in layer.units] == ["nm", "nm"]
    assert panel.layers.legend.isVisibleTo(panel.layers)
    assert "nm to" in panel.layers.legend.accessibleDescription()
    thick, thin = (layer.features["thickness_nm"].to_numpy() == v for v in
                   (layer.features["thickness_nm"].max(), layer.features["thickness_nm"].min()))  # fmt: skip
    assert not np.allclose(layer.edge_color[thick][0], layer.edge_color[thin][0])


def test_that_the_field_is_what_the_command_line_gives(measured, section_file, capsys):
    _, panel = measured
    mine = document(panel.shown.measurement)
    theirs = run_command_line(capsys, ["measure", str(section_file), "--json"])
    mine["image"].pop("path"), theirs["image"].pop("path")
    assert theirs == mine


def test_that_a_click_on_a_layer_says_what_it_is(measured):
    viewer, panel = measured
    viewer.layers.selection.active = panel.image
    mouse = Mouse(viewer, panel.image)
    mouse.drag((180, 240))
    text = panel.layers.clicked_layer.text()
    assert text.startswith("Layer ")
    assert "±" in text
    assert "Roughness" in text


def test_that_a_correction_of_the_field_keeps_both_results(measured):
    _, panel = measured
    found = panel.shown.measurement
    panel.layers.boundary.setValue(4)
    with wait_for(panel.field.shown):
        panel.layers.delete_asked.emit(4)
    assert panel.shown.unedited is found
    assert len(panel.shown.measurement.boundaries) == len(found.boundaries) - 1
    panel.work.keep()
    kept = panel.work.kept[-1]
    assert kept.unedited is found
    assert kept.measurement.settings["edits"] == ("delete 4",)
    with wait_for(panel.field.shown):
        panel.layers.restore_asked.emit(4)
    assert panel.shown.unedited is None


def test_that_a_run_is_cancelled(measured, qtbot):
    _, panel = measured
    panel.field.results.clear()
    panel.layers.measure.click()
    task = panel.field.task
    with wait_for(task.finished):
        panel.layers.cancel.click()
    assert panel.field.task is None
    assert not panel.layers.progress.isVisibleTo(panel.layers)
    assert panel.layers.measure.isEnabled()
    assert panel.status.text() == "Stopped."
    assert panel.field.results == {}
    qtbot.waitUntil(lambda: worker.running() == 0, timeout=LONG_MS)


# --- keeping ---------------------------------------------------------------------------------------------------------


def test_that_results_are_kept_named_exported_saved_and_reopened(lined, tmp_path, qtbot):
    viewer, panel = lined
    panel.work.kept.clear()
    with wait_for(panel.live.completed):
        panel.set_line((140.0, 30.0, 140.0, 450.0))
    panel.keep_button.click()
    table = panel.keeping.table
    table.item(0, 0).setText("ventral")
    table.item(0, 1).setText("near the edge")
    assert (panel.work.kept[0].name, panel.work.kept[0].note) == ("ventral", "near the edge")

    with wait_for(panel.work.done):
        panel.work.export_to(tmp_path / "out")
    written = {p.relative_to(tmp_path / "out").as_posix() for p in (tmp_path / "out").rglob("*") if p.is_file()}
    for name in ("measurement/measurement.json", "measurement/layers.csv", "measurement/traces.csv",
                 "measurement/figure.svg", "prediction/prediction.json", "prediction/figure.svg"):  # fmt: skip
        assert f"01-ventral/{name}" in written
    from layerscan.cli import run

    assert run(["verify", str(tmp_path / "out" / "01-ventral" / "measurement" / "measurement.json")]) == 0
    assert run(["verify", str(tmp_path / "out" / "01-ventral" / "prediction" / "prediction.json")]) == 0

    before = panel.work.collect()
    with wait_for(panel.work.done):
        panel.work.save_to(tmp_path / "work")
    # The image alone goes: napari 0.9.2 crashes under software OpenGL when an image is added after shapes were removed.
    viewer.layers.remove(panel.image)
    panel.work.kept.clear()
    panel.show_settings(*(type(s)() for s in (before.measure, before.predict, before.compare)))
    with wait_for(panel.live.completed):
        panel.work.open_from(tmp_path / "work" / "desk.json")
    qtbot.waitUntil(lambda: not panel.live.running, timeout=LONG_MS)
    after = panel.work.collect()
    assert replace(after, images=(), kept=(), notes=()).__dict__ == replace(before, images=(), kept=()).__dict__
    assert [replace(i, field=None).__dict__ for i in after.images] == [
        replace(i, field=None).__dict__ for i in before.images
    ]
    assert [(k.name, k.note) for k in after.kept] == [("ventral", "near the edge")]
    assert document(after.kept[0].measurement)["layers"] == document(before.kept[0].measurement)["layers"]
    assert table.item(0, 0).text() == "ventral"


# --- beside other layers, without a pixel size -----------------------------------------------------------------------


def test_that_an_image_without_a_pixel_size_asks_for_it(window, unscaled_file, qtbot):
    viewer, panel = window
    held = panel.image
    (image,) = viewer.open(str(unscaled_file), plugin="layerscan-napari")
    panel.choose_image(image)
    assert [str(unit) for unit in image.units] == ["pixel", "pixel"]
    assert "unknown" in panel.status.text()
    panel.pixel_size.setText("4 +- 0.04 nm")
    panel.pixel_size.editingFinished.emit()
    assert tuple(image.scale) == (4.0, 4.0)
    assert [f"{unit:~}" for unit in image.units] == ["nm", "nm"]
    with wait_for(panel.live.completed) as done:
        panel.set_line((180.0, 20.0, 180.0, 460.0))
    assert done.args[0].measurement.period.mean == pytest.approx(PERIOD_PX * 4, rel=0.02)
    assert done.args[0].measurement.settings["pixel_size"] == "4 +- 0.04 nm"
    viewer.layers.remove(image)
    if held is not None:
        panel.choose_image(held)
    qtbot.waitUntil(lambda: not panel.live.running, timeout=LONG_MS)


def test_that_lines_land_where_the_mouse_is_beside_layers_in_micrometres(window, qtbot):
    viewer, panel = window
    other = viewer.add_image(
        draw_section(),
        name="in um",
        scale=(PIXEL_NM / 1000, PIXEL_NM / 1000),
        units=("um", "um"),
        axis_labels=("row", "column"),
    )
    panel.choose_image(other)
    viewer.reset_view()
    panel.draw_line()
    mouse = Mouse(viewer, panel.live.layer)
    with wait_for(panel.live.completed) as done:
        mouse.drag((150, 50), (155, 200), (160, 430))
    assert panel.live.line == pytest.approx((150, 50, 160, 430), abs=2)
    assert done.args[0].measurement.period.mean == pytest.approx(PERIOD_PX * PIXEL_NM, rel=0.02)
    viewer.layers.remove(other)
    qtbot.waitUntil(lambda: not panel.live.running, timeout=LONG_MS)


# --- manners ---------------------------------------------------------------------------------------------------------


def test_that_every_control_has_a_name_and_takes_the_keyboard(window):
    _, panel = window
    found = [w for kind in (QAbstractButton, QLineEdit, QComboBox, QSpinBox) for w in panel.findChildren(kind)]
    found = [w for w in found if w.metaObject().className() in
             ("QPushButton", "QLineEdit", "QComboBox", "QSpinBox", "QDoubleSpinBox")
             and w.objectName() != "qt_spinbox_lineedit"]  # fmt: skip
    assert len(found) > 30
    assert [w for w in found if not w.accessibleName()] == []
    assert [w.accessibleName() for w in found if not w.focusPolicy() & Qt.FocusPolicy.TabFocus] == []


def test_that_no_two_keys_mean_two_things_at_once(window):
    # Alt and a letter reach a control from anywhere; napari's menus have theirs
    viewer, panel = window
    shown = [w for kind in (QAbstractButton, QLabel) for w in panel.findChildren(kind)]
    texts = [w.text() for w in shown] + [a.text() for a in viewer.window._qt_window.menuBar().actions()]
    keys = [text[text.index("&") + 1].lower() for text in texts if "&" in text.replace("&&", "")]
    assert len(keys) > 8
    assert sorted(keys) == sorted(set(keys))


def test_that_the_plots_follow_the_theme(window):
    viewer, panel = window
    seen = {}
    for theme in ("light", "dark"):
        viewer.theme = theme
        seen[theme] = panel.plots.profile.backgroundBrush().color().lightness()
    assert seen["light"] > 180 > 75 > seen["dark"]


def test_that_errors_become_notifications_in_plain_words(window):
    from napari.utils.notifications import notification_manager

    _, panel = window
    panel.line_edit.setText("1,2,three")
    panel.line_edit.editingFinished.emit()
    assert "'1,2,three' is no line. Give four numbers" in notification_manager.records[-1].message
    panel.work.show_kept(-1)
    assert "Select a result" in notification_manager.records[-1].message
    panel.line_edit.clear()


def dock_of(panel):
    from qtpy.QtWidgets import QDockWidget

    widget = panel
    while not isinstance(widget, QDockWidget):
        widget = widget.parent()
    return widget


def test_that_hiding_the_panel_stops_its_work(window, section_file, qtbot):
    viewer, panel = window
    if panel.image is None:
        viewer.open(str(section_file), plugin="layerscan-napari")
    dock = dock_of(panel)
    panel.field.results.clear()
    panel.layers.measure.click()
    dock.hide()
    assert not panel.live._timer.isActive()
    assert not panel.live._rest.isActive()
    assert panel.field.task is None
    assert panel.field.on_click not in viewer.mouse_drag_callbacks
    qtbot.waitUntil(lambda: worker.running() == 0, timeout=LONG_MS)
    dock.show()
    assert panel.field.on_click in viewer.mouse_drag_callbacks


def test_that_a_removed_panel_leaves_nothing_behind(window, qtbot):
    viewer, panel = window
    panel.field.results.clear()
    panel.layers.measure.click()
    task = panel.field.task
    viewer.window.remove_dock_widget(dock_of(panel))
    assert task.cancelled
    qtbot.waitUntil(lambda: worker.running() == 0, timeout=LONG_MS)
    assert not [c for c in viewer.mouse_drag_callbacks if getattr(c, "__self__", None) is panel.field]
    window.parts = (viewer, None)


def test_that_the_manifest_is_valid():
    from npe2 import PluginManifest

    manifest = PluginManifest.from_distribution("layerscan-napari")
    manifest.validate_imports()
    assert manifest.contributions.widgets[0].display_name == "Layers and colour"
    assert compute.MEASURE == "measure"
