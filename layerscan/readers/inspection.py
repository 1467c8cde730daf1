"""What an image file holds, and in plain words what is missing before it can be measured."""

from __future__ import annotations

import numpy as np

from layerscan._version import __version__
from layerscan.readers.source import positive
from layerscan.records import ImageSource, Inspection, Micrograph

SATURATED_ADVICE = 0.01
"""Share of pixels at the ends of the stored range from which saturation is told (common practice, no source)."""


SMALL_TILT_DEG = 2.0
"""A tilt below this changes lengths by less than 0.1 % (1 - cos 2 deg = 0.0006)."""


def inspect_image(micrograph: Micrograph) -> Inspection:
    """Look at an image without measuring it.

    Parameters
    ----------
    micrograph : Micrograph
        As ``open_image`` gives it; its pixel size may be unknown.

    Returns
    -------
    Inspection
        Extremes and the saturated fraction are of the pixels outside excluded regions; ``advice`` says what to give
        or do next.

    Raises
    ------
    InputError
        The pixels cannot be decoded.

    Notes
    -----
    Saturated are pixels at 0 or at the largest number of an unsigned stored type, or, for other types, pixels that
    share the largest value where more than one in a thousand does.

    Examples
    --------
    >>> from layerscan.readers.images import from_array
    >>> inspect_image(from_array([[1.0, 2.0]], pixel_size_nm=None)).advice[0]
    "Give the pixel size: --pixel-size '2.5 nm', or '2.5 +- 0.02 nm' with its standard uncertainty."
    """
    pixels = micrograph.load()
    used = np.ones(micrograph.shape, dtype=np.bool_) if micrograph.mask is None else micrograph.mask.copy()
    for exclusion in micrograph.excluded:
        row0, column0, row1, column1 = exclusion.region
        used[row0:row1, column0:column1] = False
    values = pixels[used & np.isfinite(pixels)]
    saturated = _saturated_fraction(values, micrograph.stored_type) if values.size else None
    size = micrograph.pixel_size
    flags = _flags(micrograph, holes=bool(np.isnan(pixels[used]).any()), saturated=saturated)
    return Inspection(
        version=__version__,
        flags=flags,
        image=ImageSource(
            path=None if micrograph.path is None else str(micrograph.path),
            sha256=micrograph.sha256,
            page=micrograph.page,
            shape=micrograph.shape,
            pixel_size=size,
            excluded=micrograph.excluded,
            doubts=micrograph.doubts,
        ),
        file_format=micrograph.file_format,
        stored_type=micrograph.stored_type,
        page_count=micrograph.page_count,
        field_of_view_nm=None
        if size is None
        else (micrograph.shape[0] * size.row_nm, micrograph.shape[1] * size.column_nm),
        minimum=float(values.min()) if values.size else None,
        maximum=float(values.max()) if values.size else None,
        saturated_fraction=saturated,
        metadata=micrograph.metadata,
        advice=_advise(micrograph, flags, values),
    )


def _saturated_fraction(values: np.ndarray, stored_type: str) -> float:
    kind = stored_type.split()[0]
    if kind in ("uint8", "uint16"):
        top = float(np.iinfo(kind).max)
        return float(((values == 0) | (values == top)).mean())
    share = float((values == values.max()).mean())
    return share if share > 1e-3 and values.max() > values.min() else 0.0


def _flags(micrograph: Micrograph, *, holes: bool, saturated: float | None) -> tuple[str, ...]:
    size = micrograph.pixel_size
    flags = []
    if size is not None:
        if size.u_relative is None:
            flags.append("calibration_uncertainty_unknown")
        if size.doubts:
            flags.append("pixel_size_doubtful")
        if abs(size.row_nm / size.column_nm - 1) > 1e-6:
            flags.append("anisotropic_pixels")
    if micrograph.excluded:
        flags.append("banner_excluded")
    if saturated is not None and saturated > SATURATED_ADVICE:
        flags.append("saturated")
    if holes:
        flags.append("holes_ignored")
    return tuple(flags)


def _advise(micrograph: Micrograph, flags: tuple[str, ...], values: np.ndarray) -> tuple[str, ...]:
    advice = []
    if micrograph.pixel_size is None:
        advice.append("Give the pixel size: --pixel-size '2.5 nm', or '2.5 +- 0.02 nm' with its standard uncertainty.")
    elif "calibration_uncertainty_unknown" in flags:
        size = micrograph.pixel_size.column_nm
        advice.append(
            f"State how well the pixel size is known: --pixel-size '{size:.6g} +- U nm', U being its standard "
            "uncertainty from a calibration specimen or certificate. No comparison concludes without it."
        )
    if "pixel_size_doubtful" in flags:
        advice.append("The pixel size is doubtful: check it against the scale bar or a specimen of known spacing.")
    if micrograph.page_count > 1:
        advice.append(
            f"The file has {micrograph.page_count} pages and page {micrograph.page} was read; choose with --page."
        )
    tilt, corrected = (micrograph.metadata.get(k, "") for k in ("stage tilt", "tilt corrected"))
    if positive(tilt.removesuffix(" deg").lstrip("-")) and abs(float(tilt.removesuffix(" deg"))) >= SMALL_TILT_DEG:
        said = f" (tilt corrected by the microscope: {corrected})" if corrected else ""
        advice.append(
            f"The header states a stage tilt of {tilt}{said}: give --stage-tilt unless "
            "the picture is corrected already."
        )
    for exclusion in micrograph.excluded:
        row0, _, row1, _ = exclusion.region
        advice.append(f"Rows {row0} to {row1 - 1} were taken for an {exclusion.reason} and are left out.")
    if "saturated" in flags:
        advice.append(
            "Part of the image is saturated: boundaries there may be displaced; record it with less contrast."
        )
    if not values.size:
        advice.append("No usable pixel is left: nothing can be measured.")
    elif values.min() == values.max():
        advice.append("All pixels have the same value: nothing can be measured.")
    if min(micrograph.shape) < 32:
        advice.append(f"The image has {micrograph.shape[0]} x {micrograph.shape[1]} pixels: too few for most layers.")
    return tuple(advice)
