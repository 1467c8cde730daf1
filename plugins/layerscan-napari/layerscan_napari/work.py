"""Keeping, exporting, saving and reopening: answers the tab "Kept" and the files of settings and observed spectra."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QObject, Signal
from qtpy.QtWidgets import QApplication, QFileDialog

from layerscan_napari import calls, desk, notes, overlays, reader
from layerscan_napari.worker import Task

if TYPE_CHECKING:
    from layerscan.records import Micrograph, Spectrum

    from layerscan_napari.panel import LayerPanel


class WorkControl(QObject):
    """Holds the kept results and the observed spectrum of a panel. ``done`` tells that a piece of file work is over."""

    done = Signal(bool)

    def __init__(self, panel: LayerPanel) -> None:
        super().__init__(panel)
        self.panel = panel
        self.kept: list[desk.Kept] = []
        self.observed: Spectrum | None = None
        self.observed_path: str | None = None
        self._tasks: list[Task] = []
        tab = panel.keeping
        tab.renamed.connect(self._rename)
        tab.remove_asked.connect(self._remove)
        tab.show_asked.connect(self.show_kept)
        tab.copy_asked.connect(self._copy_kept)
        tab.export_asked.connect(self._ask_export)
        tab.save_asked.connect(self._ask_save)
        tab.open_asked.connect(self._ask_open)
        panel.specimen.save_asked.connect(self._ask_save_settings)
        panel.specimen.load_asked.connect(self._ask_load_settings)
        panel.light.observed_asked.connect(self._ask_observed)
        panel.light.observed_dropped.connect(self.drop_observed)

    # --- background ---------------------------------------------------------------------------------------------------

    def run(self, what: str, work: Callable[[Any], Any], then: Callable[[Any], None] | None = None) -> Task:
        """Run file work in the background; ``then`` gets the result in the window's thread."""
        task = Task(work)
        task.setProperty("what", what)
        task.then = then  # type: ignore[attr-defined]
        task.succeeded.connect(self._on_success)
        task.failed.connect(self._on_failure)
        task.finished.connect(self._on_finished)
        self._tasks.append(task)
        self.panel.status.setText(f"{what}…")
        task.start()
        return task

    def _on_success(self, result: Any) -> None:
        task = self.sender()
        self.panel.status.setText(f"{task.property('what')}: done.")
        if task.then is not None:
            task.then(result)
        self.done.emit(True)

    def _on_failure(self, error: Exception) -> None:
        self.panel.status.setText(f"{self.sender().property('what')}: failed.")
        notes.tell_error(error)
        self.done.emit(False)

    def _on_finished(self) -> None:
        self._tasks = [task for task in self._tasks if task is not self.sender()]

    # --- keeping ------------------------------------------------------------------------------------------------------

    def keep(self) -> None:
        """Keep the result that is shown."""
        shown = self.panel.shown
        if shown is None or shown.measurement is None:
            notes.tell("There is no finished result to keep. Draw a line or measure the field first.")
            return
        kind = "field" if shown.job.measure.line is None else "line"
        image = self.panel.image
        name = desk.free_name(f"{image.name if image is not None else 'image'} {kind}", [k.name for k in self.kept])
        self.kept.append(
            desk.Kept(
                name=name,
                measurement=shown.measurement,
                unedited=shown.unedited,
                predict=shown.job.predict,
                prediction=shown.prediction,
                compare=shown.job.compare,
                observed=self.observed_path,
                conclusion="" if shown.comparison is None else shown.comparison.sentence,
            )
        )
        self._show_table()
        self.panel.status.setText(f"Kept as '{name}'.")

    def _show_table(self) -> None:
        self.panel.keeping.show_rows(self.kept)
        self.panel.tabs.setTabText(3, f"Kept ({len(self.kept)})" if self.kept else "Kept")

    def _rename(self, row: int, name: str, note: str) -> None:
        others = [k.name for i, k in enumerate(self.kept) if i != row]
        free = desk.free_name(name.strip() or self.kept[row].name, others)
        self.kept[row] = replace(self.kept[row], name=free, note=note)
        if free != name:
            self._show_table()

    def _remove(self, row: int) -> None:
        if 0 <= row < len(self.kept):
            del self.kept[row]
            self._show_table()

    def show_kept(self, row: int) -> None:
        """Take the image of a kept result in hand, with its line; a field's result is shown as it was kept."""
        if not 0 <= row < len(self.kept):
            notes.tell("Select a result in the table first.")
            return
        item = self.kept[row]
        image = self._find_image(item.measurement.image.path, item.measurement.image.page)
        if image is None:
            notes.tell(f"The image '{item.measurement.image.path}' of '{item.name}' is not open.")
            return
        self.panel.choose_image(image)
        line = item.measurement.settings.get("line")
        if line is None:
            saved = desk.FieldResult(measurement=item.measurement, unedited=item.unedited)
            self.panel.field.take_saved(image, saved)
            self.panel.field.show_held(image)
        else:
            self.panel.width_edit.setText(str(item.measurement.settings.get("width") or self.panel.width()))
            self.panel.set_line(tuple(line))

    def _find_image(self, path: str | None, page: int) -> Any:
        wanted = None if path is None else Path(path).resolve()
        for image in self.panel.image_layers():
            micrograph = self.panel.micrograph(image)
            if micrograph is None or micrograph.path is None:
                continue
            if micrograph.path.resolve() == wanted and micrograph.page == page:
                return image
        return None

    # --- the command line ---------------------------------------------------------------------------------------------

    def copy_shown(self) -> None:
        """Copy the calls that repeat what is shown."""
        shown = self.panel.shown
        if shown is None or shown.measurement is None:
            notes.tell("There is no finished result to repeat. Draw a line or measure the field first.")
            return
        self._copy(_calls(shown, self.observed_path))

    def _copy_kept(self, row: int) -> None:
        if 0 <= row < len(self.kept):
            self._copy(self.kept[row].call)

    def _copy(self, text: str) -> None:
        clipboard = QApplication.clipboard()
        if clipboard is not None:
            clipboard.setText(text)
            self.panel.status.setText("Copied to the clipboard.")

    # --- files --------------------------------------------------------------------------------------------------------

    def _opened(self) -> dict[str, Micrograph]:
        found = (self.panel.micrograph(image) for image in self.panel.image_layers())
        return {str(m.path): m for m in found if m is not None and m.path is not None}

    def export_to(self, folder: Path | str) -> Task:
        """Write documents and figures of every kept result."""
        kept, opened = tuple(self.kept), self._opened()
        return self.run(
            f"Exporting to {folder}",
            lambda progress: desk.export_results(folder, kept, micrographs=opened, progress=progress),
        )

    def save_to(self, folder: Path | str) -> Task:
        """Save the work."""
        held, opened = self.collect(), self._opened()
        return self.run(
            f"Saving to {folder}",
            lambda progress: desk.save_desk(folder, held, micrographs=opened, progress=progress),
        )

    def open_from(self, path: Path | str) -> Task:
        """Open saved work: images are read in the background, then everything is put back."""
        opened = {(str(m.path), m.page) for m in self._opened().values()}
        return self.run(f"Opening {path}", lambda progress: _read_work(path, opened), self._put_back)

    def open_page(self, micrograph: Micrograph, page: int) -> Task:
        """Open another page of a file as a layer of its own."""
        stated = micrograph.pixel_size.stated if micrograph.pixel_size else None
        path = micrograph.path
        assert path is not None
        return self.run(
            f"Opening page {page}",
            lambda progress: reader.read_image(path, pixel_size=stated, page=page),
            self._add_layer,
        )

    def _add_layer(self, data: reader.LayerData) -> Any:
        layer = self.panel.viewer.add_image(data[0], **data[1])
        self.panel.choose_image(layer)
        return layer

    def collect(self) -> desk.Desk:
        """All of the work as it stands."""
        panel = self.panel
        entries: list[desk.OpenImage] = []
        selected = None
        for image in panel.image_layers():
            micrograph = panel.micrograph(image)
            if micrograph is None:
                continue
            if image is panel.image:
                selected = len(entries)
            lines = overlays.find_overlay(panel.viewer, image, overlays.LINES)
            entries.append(
                desk.OpenImage(
                    path=None if micrograph.path is None else str(micrograph.path),
                    sha256=micrograph.sha256,
                    page=micrograph.page,
                    pixel_size=micrograph.pixel_size.stated if micrograph.pixel_size else None,
                    lines=() if lines is None else overlays.line_entries(lines, panel.width()),
                    field=panel.field.results_to_save(image),
                )
            )
        return desk.Desk(
            images=tuple(entries),
            selected=selected,
            measure=panel.measure_settings(),
            predict=panel.predict_settings(),
            compare=panel.compare_settings(),
            observed=self.observed_path,
            kept=tuple(self.kept),
        )

    def _put_back(self, read: tuple[desk.Desk, list[reader.LayerData | None]]) -> None:
        panel = self.panel
        saved, layers = read
        panel.show_settings(saved.measure, saved.predict, saved.compare)
        self.kept = list(saved.kept)
        self._show_table()
        if saved.observed is not None:
            self.load_observed(saved.observed)
        chosen = None
        for number, (entry, data) in enumerate(zip(saved.images, layers, strict=True)):
            image = self._find_image(entry.path, entry.page)
            if image is None and data is not None:
                image = panel.viewer.add_image(data[0], **data[1])
            if image is None:
                continue
            panel.choose_image(image)
            if entry.lines:
                panel.width_edit.setText(entry.lines[-1].width)
            for item in entry.lines:
                panel.add_line(item.line)
            if entry.field is not None:
                panel.field.take_saved(image, entry.field)
            if number == saved.selected:
                chosen = image
        if chosen is not None:
            panel.choose_image(chosen)
        for note in saved.notes:
            notes.tell(note)

    def load_observed(self, path: Path | str) -> None:
        """Show an observed spectrum beside the predicted one and compare with it."""
        import layerscan

        try:
            self.observed = layerscan.open_spectrum(path, quantity=self.panel.compare_settings().quantity)
        except Exception as error:
            notes.tell_error(error)
            return
        self.observed_path = str(path)
        self.panel.light.observed.setText(f"{Path(path).name}: {self.observed.kind}")
        self.panel.plots.show_observed(self.observed)
        self.panel.recompute()

    def drop_observed(self) -> None:
        """Take the observed spectrum away."""
        self.observed = self.observed_path = None
        self.panel.light.observed.setText("no observed spectrum")
        self.panel.plots.show_observed(None)
        self.panel.recompute()

    def save_settings_to(self, path: Path | str) -> None:
        """Save the settings of both tabs."""
        panel = self.panel
        try:
            desk.save_settings(
                path,
                measure=panel.measure_settings(),
                predict=panel.predict_settings(),
                compare=panel.compare_settings(),
            )
        except Exception as error:
            notes.tell_error(error)

    def load_settings_from(self, path: Path | str) -> None:
        """Take over saved settings and compute anew."""
        try:
            saved = desk.load_settings(path)
        except Exception as error:
            notes.tell_error(error)
            return
        self.panel.show_settings(saved.measure, saved.predict, saved.compare)
        self.panel.recompute()

    # --- asking for files ---------------------------------------------------------------------------------------------

    def _ask_export(self) -> None:
        if not self.kept:
            notes.tell("There is nothing to export. Keep a result first.")
            return
        folder = QFileDialog.getExistingDirectory(self.panel, "Folder for documents and figures")
        if folder:
            self.export_to(folder)

    def _ask_save(self) -> None:
        folder = QFileDialog.getExistingDirectory(self.panel, "Folder for the work")
        if folder:
            self.save_to(folder)

    def _ask_open(self) -> None:
        path, _ = QFileDialog.getOpenFileName(self.panel, "Saved work", "", "Saved work (desk.json)")
        if path:
            self.open_from(path)

    def _ask_observed(self) -> None:
        path, _ = QFileDialog.getOpenFileName(self.panel, "Observed spectrum")
        if path:
            self.load_observed(path)

    def _ask_save_settings(self) -> None:
        path, _ = QFileDialog.getSaveFileName(self.panel, "Save settings", "settings.json", "Settings (*.json)")
        if path:
            self.save_settings_to(path)

    def _ask_load_settings(self) -> None:
        path, _ = QFileDialog.getOpenFileName(self.panel, "Load settings", "", "Settings (*.json)")
        if path:
            self.load_settings_from(path)


def _calls(shown: Any, observed: str | None) -> str:
    """Calls that repeat a result, one a line: measure, then predict and compare where they were made."""
    from layerscan.settings import MeasureSettings

    settings = MeasureSettings(**shown.measurement.settings)
    predicted = shown.prediction is not None and shown.job.predict is not None
    path = shown.measurement.image.path or "IMAGE"
    lines = [calls.measure_call(path, settings, out="measurement" if predicted else None)]
    if predicted:
        compared = shown.comparison is not None and shown.job.compare is not None
        lines.append(calls.predict_call("measurement", shown.job.predict, out="prediction" if compared else None))
        if compared:
            beside = None if shown.job.compare.lab is not None else observed
            lines.append(calls.compare_call("prediction", beside, shown.job.compare))
    return "\n".join(lines)


def _read_work(path: Path | str, opened: set[tuple[str, int]]) -> tuple[desk.Desk, list[reader.LayerData | None]]:
    """Saved work and the image layers that are not open yet."""
    saved = desk.load_desk(path)
    layers: list[reader.LayerData | None] = []
    for entry in saved.images:
        if entry.path is None or (entry.path, entry.page) in opened:
            layers.append(None)
        else:
            layers.append(reader.read_image(entry.path, pixel_size=entry.pixel_size, page=entry.page))
    return saved, layers
