"""Colour of a spectrum: CIE tristimulus values, CIELAB, colour difference, sRGB swatch, dominant wavelength.

Colour differences (CIEDE2000) are validated for small differences between matt samples under diffuse or 45/0 viewing,
not for iridescence: a number here compares spectra, it does not say what an eye sees on a shining specimen.
"""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Literal

import numpy as np

from layerscan.errors import InputError, SettingsError
from layerscan.records import Colour

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

    from layerscan.records import FloatArray

Illuminant = Literal["D65", "D50", "A"]
TABLES = Path(__file__).with_name("cie_tables.csv")
FIRST_NM, LAST_NM = 360, 780  # of the sum (ASTM E308); what a spectrum lacks there takes its end value
COARSE_NM = 2.0  # steps up to this are interpolated linearly, wider ones by a cubic spline
MISSING_WEIGHT = 1e-3  # share of X, Y or Z outside the spectrum from which on it counts as truncated
SRGB_WHITE = (0.3127 / 0.3290, 1.0, (1 - 0.3127 - 0.3290) / 0.3290)
XYZ_TO_SRGB = np.array(  # IEC 61966-2-1
    [[3.2406, -1.5372, -0.4986], [-0.9689, 1.8758, 0.0415], [0.0557, -0.2040, 1.0570]]
)
BRADFORD = np.array([[0.8951, 0.2664, -0.1614], [-0.7502, 1.7135, 0.0367], [0.0389, -0.0685, 1.0296]])
GAMUT_TOLERANCE = 2e-3  # of linear sRGB: the standard's matrix is rounded to four decimals
DELTA, KAPPA = 6 / 29, (29 / 3) ** 3


def colour_of_spectrum(
    wavelength_nm: ArrayLike, value: ArrayLike, *, illuminant: Illuminant = "D65", observer_deg: Literal[2, 10] = 2
) -> Colour:
    """Colour of a reflectance or transmittance spectrum under an illuminant.

    Parameters
    ----------
    wavelength_nm : (wavelengths,) float array
        Increasing.
    value : (wavelengths,) float array
        Reflectance or transmittance, 1 for the perfect reflecting diffuser.
    illuminant : {"D65", "D50", "A"}
        Illuminant; it also is the white of CIELAB.
    observer_deg : {2, 10}
        CIE 1931 2 degree or CIE 1964 10 degree standard observer.

    Returns
    -------
    Colour
        XYZ with Y = 100 for the perfect diffuser; flags ``spectrum_truncated`` and ``out_of_gamut``.

    Raises
    ------
    InputError
        Arrays that do not fit, NaN, or wavelengths that do not increase or do not touch the visible range.
    SettingsError
        An unknown illuminant or observer.

    Notes
    -----
    Sum at 1 nm over 360 to 780 nm; the same sum of the illuminant alone is the one white used everywhere, so that the
    perfect diffuser has a* = b* = 0. Ends that the spectrum lacks take its end value, as in ASTM E308, and the colour
    is flagged. The dominant wavelength is interpolated along the spectrum locus; for a purple it is the complementary
    wavelength, negative, and the purity is measured to the purple line. The swatch is adapted to the white of sRGB
    (Bradford); outside the gamut it keeps lightness and hue and gives up chroma.

    References
    ----------
    .. [1] CIE 15:2018, Colorimetry, 4th ed., sections 7 and 8.
    .. [2] ASTM E308-18, Computing the colors of objects by using the CIE system.
    .. [3] IEC 61966-2-1:1999, sRGB.

    Examples
    --------
    >>> [round(x, 3) for x in colour_of_spectrum([360, 780], [1.0, 1.0]).xyz]
    [95.047, 100.0, 108.883]
    """
    wavelength = np.asarray(wavelength_nm, dtype=float)
    spectrum = np.asarray(value, dtype=float)
    _check(wavelength, spectrum)
    weights = tristimulus_weights(wavelength, illuminant=illuminant, observer_deg=observer_deg)
    xyz = spectrum @ weights
    flags = []
    if _missing_weight(wavelength, illuminant, observer_deg) > MISSING_WEIGHT:
        flags.append("spectrum_truncated")
    white = white_point(illuminant=illuminant, observer_deg=observer_deg)
    lab = lab_of_xyz(xyz, white)
    srgb, in_gamut = srgb_of_lab(lab)
    if not in_gamut:
        flags.append("out_of_gamut")
    total = float(xyz.sum())
    xy = (float(xyz[0]) / total, float(xyz[1]) / total) if total > 0 else tuple((white / white.sum())[:2].tolist())
    dominant, purity = dominant_wavelength(xy, illuminant=illuminant, observer_deg=observer_deg)
    return Colour(
        xyz=_three(xyz),
        xy=(xy[0], xy[1]),
        lab=_three(lab),
        srgb=srgb,
        in_gamut=in_gamut,
        dominant_wavelength_nm=dominant,
        excitation_purity=purity,
        illuminant=illuminant,
        observer_deg=observer_deg,
        flags=tuple(flags),
    )


def _three(values: FloatArray) -> tuple[float, float, float]:
    return float(values[0]), float(values[1]), float(values[2])


def _check(wavelength: FloatArray, spectrum: FloatArray) -> None:
    if wavelength.ndim != 1 or wavelength.size < 2 or spectrum.shape[-1:] != wavelength.shape:
        raise InputError(
            f"Spectrum of shape {spectrum.shape} at {wavelength.shape} wavelengths: two arrays of one length, two "
            "values or more, are needed for a colour."
        )
    if not (np.isfinite(wavelength).all() and np.isfinite(spectrum).all()):
        raise InputError("The spectrum holds values that are not finite. Leave those rows out.")
    if (np.diff(wavelength) <= 0).any():
        raise InputError("The wavelengths of the spectrum do not increase. Sort them and leave out repeated ones.")
    if wavelength[0] > LAST_NM or wavelength[-1] < FIRST_NM:
        raise InputError(
            f"The spectrum covers {wavelength[0]:g} to {wavelength[-1]:g} nm, nothing of the visible range: no colour "
            f"exists. Give wavelengths within {FIRST_NM} to {LAST_NM} nm."
        )


@lru_cache(maxsize=1)
def _tables() -> dict[str, FloatArray]:
    lines = [line for line in TABLES.read_text(encoding="utf-8").splitlines() if not line.startswith("#")]
    data = np.array([[float(x) for x in line.split(",")] for line in lines[1:]])
    return dict(zip(lines[0].split(","), data.T, strict=True))


@lru_cache(maxsize=8)
def _source_weights(illuminant: Illuminant, observer_deg: Literal[2, 10]) -> FloatArray:
    """Illuminant times colour-matching functions at 1 nm, (421, 3), scaled so that Y of the perfect diffuser is 100."""
    tables = _tables()
    if illuminant not in ("D65", "D50", "A"):
        raise SettingsError(f"Illuminant '{illuminant}' is not known. Give D65, D50 or A.")
    if observer_deg not in (2, 10):
        raise SettingsError(f"Observer {observer_deg} degrees is not known. Give 2 or 10.")
    used = slice(0, LAST_NM - FIRST_NM + 1)
    functions = np.stack([tables[f"{axis}{observer_deg}"][used] for axis in "xyz"], axis=1)
    weights = functions * tables[illuminant][used, None]
    result: FloatArray = weights * (100.0 / weights[:, 1].sum())
    return result


def white_point(*, illuminant: Illuminant = "D65", observer_deg: Literal[2, 10] = 2) -> FloatArray:
    """XYZ of the perfect reflecting diffuser, (3,): the one white that everything here is relative to."""
    white: FloatArray = _source_weights(illuminant, observer_deg).sum(axis=0)
    return white


def tristimulus_weights(
    wavelength_nm: FloatArray, *, illuminant: Illuminant = "D65", observer_deg: Literal[2, 10] = 2
) -> FloatArray:
    """Weights, (wavelengths, 3), with which spectra on this grid sum to XYZ: ``spectra @ weights``."""
    wavelength = np.ascontiguousarray(wavelength_nm, dtype=float)
    return _weights(wavelength.tobytes(), illuminant, observer_deg).copy()


@lru_cache(maxsize=16)
def _weights(wavelength_bytes: bytes, illuminant: Illuminant, observer_deg: Literal[2, 10]) -> FloatArray:
    wavelength = np.frombuffer(wavelength_bytes)
    source = _source_weights(illuminant, observer_deg)
    grid = np.clip(np.arange(FIRST_NM, LAST_NM + 1, dtype=float), wavelength[0], wavelength[-1])
    if np.diff(wavelength).max() <= COARSE_NM or wavelength.size < 4 or wavelength.size > 400:
        right = np.clip(np.searchsorted(wavelength, grid), 1, wavelength.size - 1)
        share = (grid - wavelength[right - 1]) / (wavelength[right] - wavelength[right - 1])
        weights = np.zeros((wavelength.size, 3))
        np.add.at(weights, right - 1, (1 - share)[:, None] * source)
        np.add.at(weights, right, share[:, None] * source)
        return weights
    from scipy.interpolate import CubicSpline

    result: FloatArray = CubicSpline(wavelength, np.eye(wavelength.size))(grid).T @ source
    return result


def _missing_weight(wavelength: FloatArray, illuminant: Illuminant, observer_deg: Literal[2, 10]) -> float:
    """Largest share of X, Y or Z of the white that lies outside the spectrum."""
    source = _source_weights(illuminant, observer_deg)
    grid = np.arange(FIRST_NM, LAST_NM + 1)
    outside = (grid < wavelength[0]) | (grid > wavelength[-1])
    return float((source[outside].sum(axis=0) / source.sum(axis=0)).max())


def lab_of_xyz(xyz: ArrayLike, white: ArrayLike) -> FloatArray:
    """CIELAB of XYZ, (..., 3), relative to a white (CIE 15:2018, section 8.2.1)."""
    ratio = np.asarray(xyz, dtype=float) / np.asarray(white, dtype=float)
    f = np.where(ratio > DELTA**3, np.cbrt(ratio), (KAPPA * ratio + 16) / 116)
    return np.stack([116 * f[..., 1] - 16, 500 * (f[..., 0] - f[..., 1]), 200 * (f[..., 1] - f[..., 2])], axis=-1)


def xyz_of_lab(lab: ArrayLike, white: ArrayLike) -> FloatArray:
    """Inverse of ``lab_of_xyz``."""
    values = np.asarray(lab, dtype=float)
    y = (values[..., 0] + 16) / 116
    f = np.stack([y + values[..., 1] / 500, y, y - values[..., 2] / 200], axis=-1)
    result: FloatArray = np.where(f > DELTA, f**3, (116 * f - 16) / KAPPA) * np.asarray(white, dtype=float)
    return result


def colour_difference(lab_1: ArrayLike, lab_2: ArrayLike) -> FloatArray | float:
    """Colour difference CIEDE2000 between CIELAB colours, (..., 3) each, with kL = kC = kH = 1.

    Returns
    -------
    float or (...) float array

    Notes
    -----
    Validated for small differences (below about 5) of matt samples; larger values order spectra, not impressions.

    References
    ----------
    .. [1] ISO/CIE 11664-6:2014.
    .. [2] G. Sharma, W. Wu, E. N. Dalal, Color Res. Appl. 30, 21-30 (2005), DOI 10.1002/col.20070.

    Examples
    --------
    >>> round(float(colour_difference([50, 2.6772, -79.7751], [50, 0, -82.7485])), 4)
    2.0425
    """
    l1, a1, b1 = np.moveaxis(np.asarray(lab_1, dtype=float), -1, 0)
    l2, a2, b2 = np.moveaxis(np.asarray(lab_2, dtype=float), -1, 0)
    mean_chroma = (np.hypot(a1, b1) + np.hypot(a2, b2)) / 2
    g = 0.5 * (1 - np.sqrt(mean_chroma**7 / (mean_chroma**7 + 25.0**7)))
    a1, a2 = (1 + g) * a1, (1 + g) * a2
    c1, c2 = np.hypot(a1, b1), np.hypot(a2, b2)
    h1, h2 = np.degrees(np.arctan2(b1, a1)) % 360, np.degrees(np.arctan2(b2, a2)) % 360
    grey = c1 * c2 == 0
    step = h2 - h1
    step = np.where(step > 180, step - 360, np.where(step < -180, step + 360, step))
    step = np.where(grey, 0.0, step)
    dl, dc, dh = l2 - l1, c2 - c1, 2 * np.sqrt(c1 * c2) * np.sin(np.radians(step / 2))
    total = h1 + h2
    far = abs(h1 - h2) > 180
    h = np.where(grey, total, np.where(far, np.where(total < 360, total + 360, total - 360), total) / 2)
    lightness, chroma = (l1 + l2) / 2, (c1 + c2) / 2
    t = (
        1
        - 0.17 * np.cos(np.radians(h - 30))
        + 0.24 * np.cos(np.radians(2 * h))
        + 0.32 * np.cos(np.radians(3 * h + 6))
        - 0.20 * np.cos(np.radians(4 * h - 63))
    )
    sl = 1 + 0.015 * (lightness - 50) ** 2 / np.sqrt(20 + (lightness - 50) ** 2)
    sc, sh = 1 + 0.045 * chroma, 1 + 0.015 * chroma * t
    rc = 2 * np.sqrt(chroma**7 / (chroma**7 + 25.0**7))
    rt = -np.sin(np.radians(60 * np.exp(-(((h - 275) / 25) ** 2)))) * rc
    x, y, z = dl / sl, dc / sc, dh / sh
    result = np.sqrt(np.maximum(x * x + y * y + z * z + rt * y * z, 0.0))
    return float(result) if result.ndim == 0 else result


def srgb_of_lab(lab: ArrayLike) -> tuple[str, bool]:
    """Swatch ``#rrggbb`` of a CIELAB colour and whether it lies in the sRGB gamut.

    The white of CIELAB becomes the white of sRGB. Outside the gamut lightness and hue are kept and chroma is given up.
    """
    colour = np.asarray(lab, dtype=float)
    linear = _linear_srgb(colour)
    inside = bool((linear >= -GAMUT_TOLERANCE).all() and (linear <= 1 + GAMUT_TOLERANCE).all())
    if not inside:
        colour = np.array([min(max(colour[0], 0.0), 100.0), colour[1], colour[2]])
        low, high = 0.0, 1.0
        for _ in range(40):
            middle = (low + high) / 2
            linear = _linear_srgb(colour * np.array([1.0, middle, middle]))
            if (linear >= -1e-9).all() and (linear <= 1 + 1e-9).all():
                low = middle
            else:
                high = middle
        linear = _linear_srgb(colour * np.array([1.0, low, low]))
    linear = np.clip(linear, 0.0, 1.0)
    encoded = np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055)
    red, green, blue = np.rint(255 * encoded).astype(int)
    return f"#{red:02x}{green:02x}{blue:02x}", inside


def _linear_srgb(lab: FloatArray) -> FloatArray:
    result: FloatArray = XYZ_TO_SRGB @ xyz_of_lab(lab, SRGB_WHITE)
    return result


@lru_cache(maxsize=2)
def _locus(observer_deg: Literal[2, 10]) -> tuple[FloatArray, FloatArray]:
    """Spectrum locus from 380 to 700 nm: wavelengths and chromaticities (n, 2)."""
    tables = _tables()
    used = (tables["wavelength_nm"] >= 380) & (tables["wavelength_nm"] <= 700)
    xyz = np.stack([tables[f"{axis}{observer_deg}"][used] for axis in "xyz"], axis=1)
    return tables["wavelength_nm"][used], xyz[:, :2] / xyz.sum(axis=1, keepdims=True)


def dominant_wavelength(
    xy: tuple[float, ...], *, illuminant: Illuminant = "D65", observer_deg: Literal[2, 10] = 2
) -> tuple[float | None, float | None]:
    """Dominant wavelength [nm] and excitation purity of a chromaticity; (None, None) for the white itself.

    A purple has the complementary wavelength, negative, and its purity is measured to the purple line
    (CIE 15:2018, section 7.3).
    """
    white = white_point(illuminant=illuminant, observer_deg=observer_deg)
    origin = white[:2] / white.sum()
    direction = np.array(xy[:2]) - origin
    if np.hypot(*direction) < 1e-6:
        return None, None
    wavelength, points = _locus(observer_deg)
    hit = _crossing(origin, direction, points)
    if hit is not None:
        number, share, distance = hit
        return float(wavelength[number] + share * (wavelength[number + 1] - wavelength[number])), 1 / distance
    purple = _crossing(origin, direction, points[[-1, 0]])
    opposite = _crossing(origin, -direction, points)
    if purple is None or opposite is None:
        return None, None
    number, share, _ = opposite
    return -float(wavelength[number] + share * (wavelength[number + 1] - wavelength[number])), 1 / purple[2]


def _crossing(origin: FloatArray, direction: FloatArray, points: FloatArray) -> tuple[int, float, float] | None:
    """Where a ray meets a polyline: segment, share of the segment, distance in units of ``direction``."""
    start, edge = points[:-1] - origin, np.diff(points, axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        cross = direction[0] * edge[:, 1] - direction[1] * edge[:, 0]
        distance = (start[:, 0] * edge[:, 1] - start[:, 1] * edge[:, 0]) / cross
        share = (start[:, 0] * direction[1] - start[:, 1] * direction[0]) / cross
    hits = np.flatnonzero((distance > 0) & (share >= 0) & (share <= 1))
    if not hits.size:
        return None
    number = int(hits[np.argmax(distance[hits])])
    return number, float(share[number]), float(distance[number])
