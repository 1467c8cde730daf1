"""Pictures without layers, and knife chatter, which only a second section can tell from layers; all invented.

Each kind imitates what people really meet: noise, power-law texture, fibres, cells, spinodal patterns, one edge with
curtains, mains-frequency rows, moire of two lattices, Fresnel fringes beside an edge.
"""

from __future__ import annotations

import math

import numpy as np
from scipy import ndimage
from scipy.special import ndtr
from sections import correlated_noise, quantise, smooth_field

NEGATIVES = ("noise", "power_law", "fibres", "cells", "spinodal", "edge_curtains", "mains_rows", "moire", "fresnel")


def _unit(field: np.ndarray) -> np.ndarray:
    """Zero mean, unit rms."""
    return (field - field.mean()) / max(field.std(), 1e-12)


def _noise(rng: np.random.Generator, shape: tuple[int, int]) -> np.ndarray:
    white = rng.standard_normal(shape)
    if rng.random() < 0.6:
        white = _unit(ndimage.gaussian_filter(white, rng.uniform(0.4, 4)))
    if rng.random() < 0.3:  # a detector that smears along the fast axis
        white = _unit(ndimage.gaussian_filter1d(white, rng.uniform(0.5, 3), axis=1))
    return 0.5 + 0.15 * white


def _power_law(rng: np.random.Generator, shape: tuple[int, int]) -> np.ndarray:
    ky, kx = np.fft.fftfreq(shape[0])[:, None], np.fft.rfftfreq(shape[1])[None, :]
    stretch, turn = math.exp(rng.uniform(0, 1.2)), rng.uniform(0, math.pi)
    u = (kx * math.cos(turn) + ky * math.sin(turn)) * stretch
    v = -kx * math.sin(turn) + ky * math.cos(turn)
    k = np.hypot(u, v)
    k[0, 0] = 1
    spectrum = np.fft.rfft2(rng.standard_normal(shape)) * k ** (-rng.uniform(0.5, 2.5) / 1.0)
    spectrum[0, 0] = 0
    return 0.5 + 0.12 * _unit(np.fft.irfft2(spectrum, shape)) + 0.03 * rng.standard_normal(shape)


def _fibres(rng: np.random.Generator, shape: tuple[int, int]) -> np.ndarray:
    """Rods laid at random about a preferred direction: anisotropic, with a width but no repeat."""
    image = np.full(shape, 0.35)
    main, spread = rng.uniform(0, math.pi), rng.uniform(0.05, 0.5)
    width = rng.uniform(2, 8)
    for _ in range(int(rng.uniform(0.4, 1.2) * shape[0] * shape[1] / (width * 60))):
        length, angle = rng.uniform(30, 0.8 * max(shape)), main + rng.normal(0, spread)
        row, column = rng.uniform(-40, shape[0] + 40), rng.uniform(-40, shape[1] + 40)
        half_r = abs(length / 2 * math.sin(angle)) + 2 * width
        half_c = abs(length / 2 * math.cos(angle)) + 2 * width
        r0, r1 = max(int(row - half_r), 0), min(int(row + half_r) + 1, shape[0])
        c0, c1 = max(int(column - half_c), 0), min(int(column + half_c) + 1, shape[1])
        if r1 <= r0 or c1 <= c0:
            continue
        y, x = np.arange(r0, r1)[:, None] - row, np.arange(c0, c1)[None, :] - column
        along = x * math.cos(angle) + y * math.sin(angle)
        across = -x * math.sin(angle) + y * math.cos(angle)
        own = width * rng.uniform(0.6, 1.4)
        inside = ndtr((length / 2 - np.abs(along)) / 1.5) * ndtr((own / 2 - np.abs(across)) / 0.8)
        image[r0:r1, c0:c1] += inside * (rng.uniform(0.4, 0.8) - image[r0:r1, c0:c1])
    return image + rng.uniform(0.02, 0.12) * rng.standard_normal(shape)


def _cells(rng: np.random.Generator, shape: tuple[int, int]) -> np.ndarray:
    """Foam of cells with walls (Voronoi), some with a hexagonal tendency."""
    size = rng.uniform(14, 60)
    ny, nx = int(shape[0] / size) + 3, int(shape[1] / size) + 3
    y, x = np.mgrid[-1:ny, -1:nx].astype(float)
    x = x + 0.5 * (y % 2)
    jitter = rng.uniform(0.15, 0.45)
    seeds = (
        np.column_stack([(y + rng.normal(0, jitter, y.shape)).ravel(), (x + rng.normal(0, jitter, x.shape)).ravel()])
        * size
    )
    from scipy.spatial import cKDTree

    r, c = np.mgrid[0 : shape[0], 0 : shape[1]]
    distance, nearest = cKDTree(seeds).query(np.column_stack([r.ravel(), c.ravel()]), k=2)
    wall = np.exp(-(((distance[:, 1] - distance[:, 0]) / rng.uniform(2, 6)) ** 2)).reshape(shape)
    body = (0.08 * rng.standard_normal(len(seeds)))[nearest[:, 0]].reshape(shape)
    return 0.4 + body + rng.uniform(0.15, 0.4) * wall + rng.uniform(0.02, 0.1) * rng.standard_normal(shape)


def _spinodal(rng: np.random.Generator, shape: tuple[int, int]) -> np.ndarray:
    """Bicontinuous pattern with one length but no direction: band-passed noise, cut at a level."""
    k = np.hypot(np.fft.fftfreq(shape[0])[:, None], np.fft.rfftfreq(shape[1])[None, :])
    centre = 1 / rng.uniform(8, 50)
    band = np.exp(-0.5 * ((k - centre) / (rng.uniform(0.08, 0.3) * centre)) ** 2)
    field = _unit(np.fft.irfft2(np.fft.rfft2(rng.standard_normal(shape)) * band, shape))
    return (
        0.3
        + 0.4 * ndtr((field - rng.uniform(-0.5, 0.5)) / rng.uniform(0.1, 0.6))
        + rng.uniform(0.02, 0.15) * rng.standard_normal(shape)
    )


def _edge_curtains(rng: np.random.Generator, shape: tuple[int, int]) -> np.ndarray:
    """One edge between two materials, and milling curtains at any angle to it."""
    y, x = np.mgrid[0 : shape[0], 0 : shape[1]].astype(float)
    a, b = rng.uniform(0, math.pi), rng.uniform(0, math.pi)
    place = rng.uniform(-0.25, 0.25) * min(shape)
    depth = (x - shape[1] / 2) * math.cos(a) + (y - shape[0] / 2) * math.sin(a) - place
    image = 0.3 + rng.uniform(0.1, 0.4) * ndtr(depth / rng.uniform(0.8, 2.5))
    across = -x * math.sin(b) + y * math.cos(b)
    length = int(np.ptp(across)) + 3
    lines = correlated_noise(rng, length, rng.uniform(4, 30), 0.5) + 0.7 * correlated_noise(rng, length, 1.5, 0.5)
    grow = 1 + rng.uniform(0, 1) * (np.abs(depth) / max(shape))
    image *= 1 + rng.uniform(0.03, 0.15) * np.interp(across - across.min(), np.arange(length), lines) * grow
    return image + rng.uniform(0.01, 0.1) * rng.standard_normal(shape)


def _mains_rows(rng: np.random.Generator, shape: tuple[int, int]) -> np.ndarray:
    """Mains hum on the detector: one sinusoid in time seen through the raster, so rows (or slants) of fixed phase.

    The raster makes it follow the scan clock: a phase advance per pixel along a row and per row.
    """
    base = _power_law(rng, shape)
    period_rows = rng.uniform(3, 40)
    per_pixel = rng.choice([0.0, rng.uniform(-0.8, 0.8)]) / max(shape[1], 1)
    y, x = np.arange(shape[0])[:, None], np.arange(shape[1])[None, :]
    wander = 0.2 * correlated_noise(rng, shape[0], 60.0, 0.7)[:, None]
    phase = 2 * math.pi * (y / period_rows + per_pixel * x) + wander
    return base + rng.uniform(0.02, 0.1) * np.sin(phase)


def _moire(rng: np.random.Generator, shape: tuple[int, int]) -> np.ndarray:
    """Two overlapping fine lattices turned against each other, each with rows in several directions."""
    y, x = np.mgrid[0 : shape[0], 0 : shape[1]].astype(float)
    spacing, fold = rng.uniform(5, 12), int(rng.choice([4, 6]))
    turn = rng.uniform(0, math.pi)
    image = np.zeros(shape)
    for grain in range(2):
        angle = turn + grain * math.radians(rng.uniform(3, 12))
        own = spacing * (1 + grain * rng.uniform(-0.08, 0.08))
        for m in range(fold // 2):
            direction = angle + m * 2 * math.pi / fold
            image += np.cos(2 * math.pi / own * (x * math.cos(direction) + y * math.sin(direction)))
    image = np.where(rng.random() < 0.5, image, image + 0.3 * image**2)
    return 0.5 + 0.12 * _unit(image) + rng.uniform(0.02, 0.15) * rng.standard_normal(shape)


def _fresnel(rng: np.random.Generator, shape: tuple[int, int]) -> np.ndarray:
    """Defocused edge: fringes at sqrt(2 n lambda z), ever closer and weaker away from the edge."""
    y, x = np.mgrid[0 : shape[0], 0 : shape[1]].astype(float)
    a = rng.uniform(0, 2 * math.pi)
    depth = (x - shape[1] / 2) * math.cos(a) + (y - shape[0] / 2) * math.sin(a) - rng.uniform(-0.3, 0.3) * min(shape)
    from scipy.special import fresnel

    s, c = fresnel(depth / rng.uniform(6, 30))
    fringes = 0.5 * ((0.5 + c) ** 2 + (0.5 + s) ** 2)
    envelope = np.exp(-0.5 * (np.clip(depth, 0, None) / rng.uniform(30, 150)) ** 2)
    image = np.where(depth > 0, 1 + (fringes - 1) * envelope, fringes)
    image = ndimage.gaussian_filter(0.25 + 0.35 * image, rng.uniform(0.6, 1.5))
    return image + rng.uniform(0.01, 0.1) * rng.standard_normal(shape)


_DRAW = {
    "noise": _noise, "power_law": _power_law, "fibres": _fibres, "cells": _cells, "spinodal": _spinodal,
    "edge_curtains": _edge_curtains, "mains_rows": _mains_rows, "moire": _moire, "fresnel": _fresnel,
}  # fmt: skip


def make_negative(kind: str, seed: int, shape: tuple[int, int] = (512, 512)) -> np.ndarray:
    """Picture without layers of one kind of ``NEGATIVES``; 8 bits for two seeds in three, else float32."""
    if kind not in NEGATIVES:
        raise ValueError(f"Kind '{kind}' is not known. Choose one of {', '.join(NEGATIVES)}.")
    rng = np.random.default_rng([seed, NEGATIVES.index(kind), 4711])
    image = _DRAW[kind](rng, shape)
    if rng.random() < 0.4:
        image = image * (1 + 0.08 * smooth_field(rng, shape, max(shape) / 2.5))
    if rng.random() < 0.3:
        image = 1 - image
    return quantise(image, None if seed % 3 == 0 else 8)


def make_chatter(seed: int, shape: tuple[int, int] = (512, 512)) -> tuple[np.ndarray, float, float]:
    """Knife chatter on a structureless section: thickness varies sinusoidally along the cut, across the whole frame.

    Returns
    -------
    image : (rows, columns) array
    period_px : float
    orientation_deg : float
        Cutting direction, which is the normal of the bands.
    """
    rng = np.random.default_rng([seed, 99, 4711])
    period, angle = rng.uniform(10, 50), rng.uniform(0, 180)
    y, x = np.mgrid[0 : shape[0], 0 : shape[1]].astype(float)
    a = math.radians(angle)
    depth = x * math.cos(a) + y * math.sin(a)
    lateral = -x * math.sin(a) + y * math.cos(a)
    phase = 2 * math.pi * depth / period + rng.uniform(0, 1.5) * (lateral / max(shape)) ** 2 + rng.uniform(0, 6.3)
    thickness = 1 + rng.uniform(0.05, 0.15) * (np.sin(phase) + 0.15 * np.sin(2 * phase + 1))
    texture = 0.05 * smooth_field(rng, shape, 20) + 0.02 * smooth_field(rng, shape, 4)
    image = np.exp(-0.6 * thickness * (1 + texture)) + rng.uniform(0.01, 0.04) * rng.standard_normal(shape)
    return quantise(image, 8), period, angle
