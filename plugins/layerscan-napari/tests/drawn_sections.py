"""Test sections drawn from a period and a pixel size; invented."""

import numpy as np

PERIOD_PX, PIXEL_NM = 40.0, 5.0


def draw_section(shape=(360, 480), *, period_px=PERIOD_PX, dark=0.45, noise=8.0, tilt=0.1):
    """Lamellae whose normal points along the columns, tilted a little: grey values 60 and 190, blurred by a pixel."""
    row, column = np.mgrid[: shape[0], : shape[1]].astype(float)
    place = (column * np.cos(tilt) + row * np.sin(tilt)) % period_px
    edge = 1 / (1 + np.exp(-(place - dark * period_px) / 0.8)) - 1 / (1 + np.exp(-(place - period_px) / 0.8))
    edge += 1 / (1 + np.exp(place / 0.8))
    grey = 60 + 130 * edge + np.random.default_rng(7).normal(0, noise, shape)
    return np.clip(grey, 0, 255).astype(np.uint8)


def write_tiff(path, pixels, *, pixel_nm=PIXEL_NM, **options):
    import tifffile

    if pixel_nm is not None:
        options |= {"resolution": (1e7 / pixel_nm, 1e7 / pixel_nm), "resolutionunit": "CENTIMETER"}
    tifffile.imwrite(path, pixels, **options)
    return path
