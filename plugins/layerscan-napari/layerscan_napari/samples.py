"""Sample images in napari's File menu: those of the core, with the pixel size that their table states. All invented."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from layerscan_napari.reader import LayerData


def _open(name: str) -> list[LayerData]:
    from layerscan.demo import find_samples, list_samples

    from layerscan_napari.reader import read_image

    folder = find_samples()
    sample = next(one for one in list_samples(folder) if one.image == f"{name}.tif")
    data, options, kind = read_image(folder / sample.image, pixel_size=sample.pixel_size)
    return [(data, options, kind)]


def nacre_plate_1() -> list[LayerData]:
    """Shell plate, polished section."""
    return _open("nacre_plate_1")


def nacre_plate_2() -> list[LayerData]:
    """Shell plate, section turned in the field."""
    return _open("nacre_plate_2")


def nacre_plate_3() -> list[LayerData]:
    """Shell plate, imaged dry."""
    return _open("nacre_plate_3")


def film_web_left() -> list[LayerData]:
    """Co-extruded film, left of the web."""
    return _open("film_web_left")


def film_web_centre() -> list[LayerData]:
    """Co-extruded film, centre of the web."""
    return _open("film_web_centre")


def film_web_right() -> list[LayerData]:
    """Co-extruded film, right of the web."""
    return _open("film_web_right")
