"""Figures as files for a manuscript: SVG, PDF, or TIFF at 600 dots per inch."""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING

from layerscan.errors import SettingsError
from layerscan.figures.style import composed, plain_text, render_svg

if TYPE_CHECKING:
    from layerscan.figures.style import Drawing

SUFFIXES = (".svg", ".pdf", ".tif", ".tiff")


def write_drawing(drawing: Drawing, path: str | Path, *, dots_per_inch: int = 600) -> Path:
    """Write a drawing in the format that the file's suffix names.

    Parameters
    ----------
    drawing : Drawing
        From ``measurement_drawing``, ``prediction_drawing`` and so on.
    path : path
        Ends in .svg, .pdf, .tif or .tiff. Written under a temporary name and renamed: complete or absent.
    dots_per_inch : int
        Of a TIFF; 600 is what journals ask for line art with halftones (common practice, no source).

    Returns
    -------
    Path
        The file.

    Raises
    ------
    SettingsError
        Another suffix.
    """
    path = Path(path)
    suffix = path.suffix.lower()
    if suffix not in SUFFIXES:
        raise SettingsError(f"Figure '{path.name}' ends in '{suffix}'. Give one of {', '.join(SUFFIXES)}.")
    unfinished = path.with_name(f".{path.name}.unfinished")
    try:
        if suffix == ".svg":
            unfinished.write_text(render_svg(drawing), encoding="utf-8")
        elif suffix == ".pdf":
            _write_pdf(drawing, unfinished)
        else:
            _write_tiff(drawing, unfinished, dots_per_inch)
        os.replace(unfinished, path)
    finally:
        unfinished.unlink(missing_ok=True)
    return path


def _write_pdf(drawing: Drawing, path: Path) -> None:
    import matplotlib as mpl
    from matplotlib.backends.backend_pdf import FigureCanvasPdf

    about = {"Title": plain_text(drawing.title), "Creator": None, "Producer": None, "CreationDate": None}
    with composed(drawing) as figure, mpl.rc_context({"pdf.fonttype": 42}), path.open("wb") as file:
        FigureCanvasPdf(figure).print_pdf(file, metadata=about)  # type: ignore[no-untyped-call]


def _write_tiff(drawing: Drawing, path: Path, dots_per_inch: int) -> None:
    import numpy as np
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from PIL import Image

    with composed(drawing) as figure:
        figure.set_dpi(dots_per_inch)
        canvas = FigureCanvasAgg(figure)
        canvas.draw()  # type: ignore[no-untyped-call]
        pixels = np.asarray(canvas.buffer_rgba())[..., :3]  # type: ignore[no-untyped-call]
    image = Image.fromarray(np.ascontiguousarray(pixels))
    image.save(path, format="TIFF", compression="tiff_lzw", dpi=(dots_per_inch, dots_per_inch))
