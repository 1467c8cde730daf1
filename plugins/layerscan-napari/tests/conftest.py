"""Test sections with known layers, and one real napari window per module."""

import importlib.util
import os
import sys
import tempfile
from pathlib import Path

import numpy as np
import pytest

os.environ.setdefault("NAPARI_CONFIG", str(Path(tempfile.mkdtemp(prefix="layerscan-napari-")) / "settings.yaml"))
os.environ.setdefault("QT_API", "pyside6")

HERE = Path(__file__).parent
sys.path.insert(0, str(HERE))  # for drawn_sections
if importlib.util.find_spec("layerscan_napari") is None:  # not installed: its logic is tested from the checkout
    sys.path.insert(0, str(HERE.parent))

from drawn_sections import draw_section, write_tiff  # noqa: E402

# Deprecations inside napari and npe2, which still write their models in pydantic 1's way; ours stay errors.
OF_OTHERS = ("ignore::pydantic.PydanticDeprecatedSince20", "ignore:`json_encoders` is deprecated")


def pytest_collection_modifyitems(items):
    for item in items:
        if HERE in item.path.parents:
            for text in OF_OTHERS:
                item.add_marker(pytest.mark.filterwarnings(text))


@pytest.fixture(scope="session")
def section_file(tmp_path_factory):
    return write_tiff(tmp_path_factory.mktemp("images") / "my section.tif", draw_section())


@pytest.fixture(scope="session")
def unscaled_file(tmp_path_factory):
    return write_tiff(tmp_path_factory.mktemp("images") / "unscaled.tif", draw_section(), pixel_nm=None)


@pytest.fixture(scope="session")
def observed_file(tmp_path_factory):
    path = tmp_path_factory.mktemp("spectra") / "observed.csv"
    wavelength = np.arange(400, 701, 5)
    value = 0.05 + 0.4 * np.exp(-(((wavelength - 560) / 40) ** 2))
    rows = "".join(f"{w},{v:.5f}\n" for w, v in zip(wavelength, value, strict=True))
    path.write_text(f"wavelength_nm,reflectance\n{rows}")
    return path


class Window:
    """Viewer and panel, emptied when the module is done: pytest keeps what fixtures give."""

    def __init__(self, viewer, panel):
        self.parts = (viewer, panel)

    def __iter__(self):
        return iter(self.parts)


@pytest.fixture(scope="module")
def window(qapp):
    """A shown napari window with the panel; nothing may be left of it when the module is done."""
    import gc

    import napari
    from qtpy.QtWidgets import QApplication

    from layerscan_napari import worker

    before = set(QApplication.topLevelWidgets())
    viewer = napari.Viewer(show=True)
    viewer.window.resize(1400, 900)
    _, panel = viewer.window.add_plugin_dock_widget("layerscan-napari", "Layers and colour")
    held = Window(viewer, panel)
    yield held
    held.parts = ()
    viewer.close()
    del viewer, panel
    worker.stop_all()
    for _ in range(3):
        QApplication.sendPostedEvents(None, 52)  # deferred deletion
        QApplication.processEvents()
        gc.collect()
    left = [w for w in QApplication.topLevelWidgets() if w not in before and type(w).__name__ != "CanvasBackendDesktop"]
    assert [f"{type(w).__name__} {w.objectName()}" for w in left] == []
    assert worker.running() == 0
