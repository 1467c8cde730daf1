"""Reflectance averaged over the lateral positions at which the boundaries were traced."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from layerscan.optics import ensemble
from layerscan.optics.conditions import Cone, Polarisation, polarisations_needed
from layerscan.optics.transfer import reflected_amplitude

if TYPE_CHECKING:
    from layerscan.records import ComplexArray, FloatArray, IntArray

LATERAL_APERTURE = 0.1  # taken for the lateral resolution where the stated aperture is smaller
MOST_STATIONS = 400


def lateral_reflectance(
    index: ComplexArray,
    sequence: IntArray,
    station_thickness_nm: FloatArray,
    wavelength_nm: FloatArray,
    *,
    station_step_nm: float,
    aperture: float,
    cone: Cone,
    polarisation: Polarisation = "unpolarised",
) -> tuple[FloatArray, int]:
    """Mean reflectance over the stations of one imaged stack.

    Parameters
    ----------
    index : (materials, wavelengths) complex array
    sequence : (layers + 2,) int array
    station_thickness_nm : (stations, layers) float array
        Without gaps; see ``ensemble.fill_stations``.
    wavelength_nm : (wavelengths,) float array
    station_step_nm : float
        Distance between stations along the layers.
    aperture : float
        Effective numerical aperture, which sets the lateral resolution.
    cone : Cone
    polarisation : str

    Returns
    -------
    reflectance : (wavelengths,) float array
    windows : int
        How many parts of the field were added in intensity.

    Notes
    -----
    Parts of the field further apart than about wavelength / NA are seen side by side: their reflectances add. Within
    that distance amplitudes add, and what roughness takes from the mean amplitude leaves as scattered light, which is
    not in the result. Thicknesses do not say how high the front boundary stands at each position; it is placed so that
    the boundaries of a position have their usual depth on average, the stack as a whole being flat. The traced
    variation holds the noise of tracing too, so that the specular part comes out rather low. No further factor for
    interface roughness belongs to it: the positions already carry the roughness.
    """
    every = max(-(-station_thickness_nm.shape[0] // MOST_STATIONS), 1)
    thickness = station_thickness_nm[::every]
    middle = float(wavelength_nm[wavelength_nm.size // 2])
    resolution = middle / max(aperture, LATERAL_APERTURE)
    windows = ensemble.split_by_width(thickness, window_stations=resolution / (station_step_nm * every))
    orders = np.repeat(sequence[None], thickness.shape[0], axis=0)
    names = polarisations_needed(cone, polarisation)
    front = _front_depth(thickness)
    share = np.array([window.stop - window.start for window in windows]) / thickness.shape[0]
    total = np.zeros(wavelength_nm.size)
    for angle, weight in zip(cone.aoi_deg, cone.weight, strict=True):
        amplitude = reflected_amplitude(
            index, orders, thickness, wavelength_nm, aoi_deg=(float(angle),), polarisations=names
        )[:, 0]
        path = 2 * index[sequence[0]].real * np.cos(np.radians(angle)) / wavelength_nm
        amplitude *= np.exp(2j * np.pi * front[:, None] * path)[:, None]
        for window, part in zip(windows, share, strict=True):
            mean = amplitude[window].mean(axis=0)
            total += weight * part * (abs(mean) ** 2).mean(axis=0)
    return total, len(windows)


def _front_depth(thickness_nm: FloatArray) -> FloatArray:
    """Depth of the front boundary at each station such that all boundaries there are level on average [nm]."""
    below = np.cumsum(thickness_nm, axis=1)
    displaced = below - below.mean(axis=0)
    result: FloatArray = -displaced.sum(axis=1) / (thickness_nm.shape[1] + 1)
    return result
