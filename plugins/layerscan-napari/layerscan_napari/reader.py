"""The reader that napari calls when a file is dropped: the core's reader, and tiled pyramids level by level."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

LayerData = tuple[Any, dict[str, Any], str]


def get_reader(path: str | Sequence[str]) -> Callable[[str | Sequence[str]], list[LayerData]] | None:
    """A function that reads these files, or None where one of them is no file."""
    paths = [path] if isinstance(path, str | Path) else list(path)
    return read_images if paths and all(Path(one).is_file() for one in paths) else None


def read_images(path: str | Sequence[str]) -> list[LayerData]:
    """Image layers in nm, one for each file; in pixels where a file states no pixel size.

    Raises
    ------
    InputError
        A file cannot be read; napari shows the message.
    """
    paths = [path] if isinstance(path, str | Path) else list(path)
    return [read_image(one) for one in paths]


def read_image(path: str | Path, *, pixel_size: str | None = None, page: int = 0) -> LayerData:
    """One page of one file as an image layer."""
    from layerscan_napari import images, pyramid

    micrograph = images.open_micrograph(path, pixel_size=pixel_size, page=page)
    name = Path(path).stem if page == 0 else f"{Path(path).stem} page {page}"
    levels = pyramid.open_levels(Path(path), shape=micrograph.shape) if page == 0 else None
    if levels is not None:
        options = images.layer_options(images.keep_when_read(micrograph), name=name)
        return levels, {**options, "multiscale": True, "contrast_limits": pyramid.contrast_limits(levels[-1])}, "image"
    pixels, micrograph = images.keep_pixels(micrograph)
    return pixels, {**images.layer_options(micrograph, name=name), "contrast_limits": _limits(pixels)}, "image"


def _limits(pixels: Any) -> tuple[float, float]:
    """Grey range to show, without the outermost thousandth on either side, from a thinned copy."""
    import numpy as np

    step = max(1, int((pixels.size / 250_000) ** 0.5))
    sample = pixels[::step, ::step]
    sample = sample[np.isfinite(sample)]
    if sample.size == 0:
        return 0.0, 1.0
    low, high = (float(v) for v in np.percentile(sample, (0.1, 99.9)))
    return (low, high) if high > low else (low, low + 1.0)
