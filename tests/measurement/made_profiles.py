"""Profiles and pictures with known layers for the tests of the engine; all of it is invented."""

from __future__ import annotations

import math

import numpy as np
from scipy.special import ndtr

from layerscan.records import Exclusion, Micrograph, PixelSize


def step_profile(
    count: int, edges: np.ndarray, *, blur: float, levels: np.ndarray | None = None, noise: float = 0.0, seed: int = 0
) -> np.ndarray:
    """Alternating levels (0 first unless given) with error-function edges."""
    levels = np.arange(len(edges) + 1) % 2.0 if levels is None else levels
    depth = np.arange(count)[:, None]
    steps = np.diff(levels)
    profile = levels[0] + (steps * ndtr((depth - edges) / blur)).sum(axis=1)
    return profile + noise * np.random.default_rng(seed).standard_normal(count)


def boundary_bound(*, blur: float, noise: float, step: float = 1.0) -> float:
    """Cramer-Rao bound of a lone boundary of one profile: sqrt(2 sqrt(pi) blur) noise / step (facts of the trade)."""
    return math.sqrt(2 * math.sqrt(math.pi) * blur) * noise / step


def as_micrograph(
    image: np.ndarray,
    *,
    pixel_size_nm: float | tuple[float, float] | None = 1.0,
    u_relative: float | None = None,
    excluded: tuple[Exclusion, ...] = (),
) -> Micrograph:
    """A picture as a reader would hand it over."""
    pixels = np.ascontiguousarray(image, dtype=np.float32)
    size = None
    if pixel_size_nm is not None:
        row, column = pixel_size_nm if isinstance(pixel_size_nm, tuple) else (pixel_size_nm, pixel_size_nm)
        size = PixelSize(row_nm=row, column_nm=column, u_relative=u_relative, source="made")
    return Micrograph(
        load=lambda: pixels, shape=pixels.shape, pixel_size=size, stored_type=str(image.dtype), excluded=excluded
    )


def flat_stack(
    *, shape: tuple[int, int] = (320, 240), period: float = 20.0, noise: float = 0.05, seed: int = 0, first: float = 7.3
) -> np.ndarray:
    """Strictly periodic horizontal layers, dark 0 and bright 1, blur 1.2 px."""
    edges = first + np.arange(0, shape[0] + period, period / 2)
    profile = step_profile(shape[0], edges, blur=1.2)
    return profile[:, None] + noise * np.random.default_rng(seed).standard_normal(shape)
