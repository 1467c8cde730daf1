"""Test sections of layered structures with their full truth, written from the physics; everything here is invented.

A ``Recipe`` says what the specimen, the section and the microscope are like; ``render_section`` draws it and returns
the image together with a ``Truth`` that knows where every boundary lies. ``make_section`` draws a recipe of a kind.
Pictures without layers are in ``negatives.py``.

Conventions: points are (row, column); ``depth`` is the distance along the layer normal and ``lateral`` the distance
along the layers, both in pixels; ``orientation_deg`` is the direction of the normal from the +column axis towards the
+row axis.
"""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from section_drawing import (
    add_banner,
    correlated_noise,
    draw_structure,
    edge,
    find_centre,
    quantise,
    record,
    smooth_field,
    spoil,
    through_jpeg,
    to_layers,
    to_picture,
)
from section_kinds import DRAWS, KINDS

__all__ = [
    "KINDS",
    "Recipe",
    "Truth",
    "correlated_noise",
    "draw_recipe",
    "edge",
    "make_section",
    "quantise",
    "render_section",
    "smooth_field",
]


@dataclass(frozen=True, kw_only=True)
class Recipe:
    """Specimen, section and microscope of one picture. Lengths are pixels, signal levels 0 to 1."""

    # the sequence of layers
    period_px: float = 24.0
    dark_fraction: float = 0.5
    law: str = "normal"  # normal, lognormal or lattice (jitter about fixed places: non-cumulative)
    cv_dark: float = 0.05
    cv_bright: float = 0.05
    correlation: float = 0.0  # of neighbouring periods (first-order autoregression)
    chirp: float = 0.0  # relative change of the period from the first to the last layer
    middle_fraction: float = 0.0  # part of the period that a third phase takes (bright | middle | dark)
    missing: int = 0  # thin layers left out: their neighbours merge
    terminations: int = 0  # layers that end inside the field
    layers: int | None = None  # None: the stack fills the frame
    phase_offset: float = 0.0
    # its shape
    orientation_deg: float = 90.0
    radius_px: float | None = None  # concentric layers; None: flat
    centre: tuple[float, float] | None = None  # of curvature (row, column); None: from orientation and radius
    wave_amplitude_px: float = 0.0
    wave_length_px: float = 400.0
    roughness_px: float = 0.0
    correlation_length_px: float = 20.0
    hurst: float = 0.7
    replication: float = 0.0
    # contrast and edges
    dark_level: float = 0.25
    bright_level: float = 0.75
    middle_level: float = 0.5
    resin_level: float | None = None  # above the stack; None: goes on beyond the frame
    substrate_level: float | None = None
    blur_px: float = 1.2
    projection_px: float = 0.0  # width of the box that a tilted thick section makes of an edge
    mass_thickness: bool = False  # project mass-thickness (TEM) and blur the intensity, instead of projecting intensity
    edge_bump: float = 0.0  # SEM edge brightening, of the contrast
    edge_bump_px: float = 2.0
    # microscope
    dose: float | None = None  # electrons per pixel at signal 1 (Poisson)
    noise: float = 0.05  # detector noise in signal units
    noise_blur_px: float = 0.0
    shading: float = 0.0
    curtains: float = 0.0
    curtain_deg: float | None = None  # direction in which curtains run; None: along the layer normal
    charging: float = 0.0  # sd of row offsets
    drift_px: float = 0.0  # column shift from the first to the last row
    drift_wander_px: float = 0.0
    gamma: float = 1.0
    inverted: bool = False
    bits: int | None = None  # 8, 16 or None for float32
    jpeg_quality: int | None = None
    banner_rows: int = 0
    cracks: int = 0
    debris: int = 0
    pixel_size_nm: float = 4.0


@dataclass(frozen=True, kw_only=True, eq=False)
class Truth:
    """Where every boundary of a test section lies, and what was done to the picture.

    ``boundary_depth_px`` has one row per boundary and one column per lateral place ``lateral_px`` (spacing 1 px);
    between places it is linear: the picture was drawn with the same interpolation. ``exists`` is False where a boundary
    has ended. ``layer_phase[i]`` lies between boundaries i and i + 1, as it looks in the picture. Thicknesses and the
    period are along the local normal of the picture, over what the frame shows.
    """

    kind: str
    seed: int
    shape: tuple[int, int]
    recipe: Recipe
    lateral_px: np.ndarray
    boundary_depth_px: np.ndarray
    wave_px: np.ndarray
    exists: np.ndarray
    visible_px: np.ndarray  # (boundaries,) how many lateral pixels of each boundary the frame shows
    visible_from: np.ndarray  # (boundaries, lateral) True where the frame shows it and nothing covers it
    layer_phase: tuple[str, ...]
    outer_phase: tuple[str, str]
    step: np.ndarray  # (boundaries,) signal step, in signal units before gamma and inversion
    thickness_px: np.ndarray  # (layers,) realised mean along the local normal
    period_px: float | None
    period_n: int
    period_ends: tuple[int, int] | None
    orientation_deg: float | None  # mean over the frame, mod 180; None for a centre inside the frame
    blur_px: float
    noise: float  # sd of one pixel at the mean signal, in signal units
    contrast: float
    roughness_px: np.ndarray  # (boundaries,) realised rms about the waviness
    artefact: np.ndarray  # bool image: cracks, debris, banner
    drift: np.ndarray  # (rows,) column shift
    pixel_size_nm: float
    centre: tuple[float, float]  # reference point, or centre of curvature
    normal_scale: np.ndarray  # (lateral,) mean of 1/|gradient of depth| in the frame

    def coordinates(self, row: Any, column: Any) -> tuple[np.ndarray, np.ndarray]:
        """Depth and lateral place [px] of points of the picture."""
        row, column = np.asarray(row, float), np.asarray(column, float)
        return to_layers(self.recipe, self.centre, row, column + np.interp(row, np.arange(len(self.drift)), self.drift))

    def points(self, depth: Any, lateral: Any) -> tuple[np.ndarray, np.ndarray]:
        """Row and column of places given by depth and lateral place: the inverse of ``coordinates``."""
        row, column = to_picture(self.recipe, self.centre, np.asarray(depth, float), np.asarray(lateral, float))
        return row, column - np.interp(row, np.arange(len(self.drift)), self.drift)

    def depth_at(self, index: int, lateral: Any) -> np.ndarray:
        """Depth [px] of a boundary at lateral places."""
        return np.interp(np.asarray(lateral, float), self.lateral_px, self.boundary_depth_px[index])

    def boundary_distance(self, row: Any, column: Any, index: int) -> np.ndarray:
        """Signed distance [px] along the local normal from a boundary to points; positive towards larger depth."""
        depth, lateral = self.coordinates(row, column)
        return (depth - self.depth_at(index, lateral)) * np.interp(lateral, self.lateral_px, self.normal_scale)

    def nearest_boundary(self, row: Any, column: Any) -> tuple[int, float]:
        """Boundary with the smallest median distance to a trace, and that distance [px] (signed median)."""
        depth, lateral = self.coordinates(row, column)
        place = np.clip(np.rint(lateral - self.lateral_px[0]).astype(int), 0, len(self.lateral_px) - 1)
        median = np.median(depth[None, :] - self.boundary_depth_px[:, place], axis=1)
        best = int(np.argmin(np.abs(median)))
        return best, float(median[best])

    def trace(self, index: int) -> tuple[np.ndarray, np.ndarray]:
        """Rows and columns of a boundary where the frame shows it."""
        seen = self.visible_from[index]
        return self.points(self.boundary_depth_px[index, seen], self.lateral_px[seen])

    def required(self, share: float = 0.5) -> np.ndarray:
        """Boundaries that the frame shows over at least ``share`` of the longest one: the others lie in corners."""
        return self.visible_px >= share * self.visible_px.max(initial=1)

    def mean_period_px(self, first: int, last: int) -> float:
        """(last - first)/n along the local normal over the places where both boundaries are seen; n whole periods."""
        count = self.whole_periods(first, last)
        seen = self.visible_from[first] & self.visible_from[last]
        if not seen.any():
            seen = self.exists[first] & self.exists[last]
        span = (self.boundary_depth_px[last] - self.boundary_depth_px[first])[seen]
        return float(np.mean(span * self.normal_scale[seen]) / count)

    def whole_periods(self, first: int, last: int) -> int:
        """Number of whole periods between two boundaries of the same kind."""
        per = 4 if self.recipe.middle_fraction else 2
        return max((last - first) // per, 1)

    def summary(self) -> dict[str, Any]:
        """What fits into a JSON document: settings and realised values in px and nm."""
        q = self.pixel_size_nm
        return {
            "kind": self.kind,
            "seed": self.seed,
            "origin": "invented",
            "shape": list(self.shape),
            "pixel_size_nm": q,
            "orientation_deg": self.orientation_deg,
            "period_nm": None if self.period_px is None else self.period_px * q,
            "periods": self.period_n,
            "layers": [
                {"phase": phase, "thickness_nm": float(t * q)}
                for phase, t in zip(self.layer_phase, self.thickness_px, strict=True)
            ],
            "blur_px": self.blur_px,
            "noise_over_contrast": self.noise / self.contrast,
            "roughness_px": [float(value) for value in self.roughness_px],
            "visible_px": [int(value) for value in self.visible_px],
            "recipe": dataclasses.asdict(self.recipe),
        }


# --- the specimen ---------------------------------------------------------------------------------------------------


def _thicknesses(recipe: Recipe, rng: np.random.Generator, periods: int) -> tuple[np.ndarray, list[str]]:
    """Thickness and phase of every layer, dark first."""
    middle = recipe.middle_fraction
    parts = [("dark", recipe.dark_fraction, recipe.cv_dark)]
    bright = 1 - recipe.dark_fraction - 2 * middle
    if middle:
        parts += [("middle", middle, recipe.cv_dark)]
    parts += [("bright", bright, recipe.cv_bright)]
    if middle:
        parts += [("middle", middle, recipe.cv_dark)]
    trend = 1 + recipe.chirp * (np.arange(periods) / max(periods - 1, 1) - 0.5)
    columns = []
    for _, fraction, cv in parts:
        draw = rng.standard_normal(periods)
        if recipe.correlation:
            for i in range(1, periods):
                draw[i] = recipe.correlation * draw[i - 1] + math.sqrt(1 - recipe.correlation**2) * draw[i]
        mean = fraction * recipe.period_px
        if recipe.law == "lognormal":
            s = math.sqrt(math.log1p(cv * cv))
            columns.append(mean * np.exp(s * draw - s * s / 2) * trend)
        elif recipe.law == "normal":
            columns.append(np.maximum(mean * (1 + cv * draw), 0.25 * mean) * trend)
        else:  # lattice: jitter of each boundary about its place
            columns.append(mean * trend)
    thickness = np.stack(columns, axis=1).ravel()
    if recipe.law == "lattice":
        jitter = rng.standard_normal(len(thickness) + 1) * recipe.cv_dark * recipe.period_px
        thickness = np.maximum(thickness + np.diff(jitter), 0.2 * thickness)
    return thickness, [name for name, _, _ in parts] * periods


def _drop_missing(
    recipe: Recipe, rng: np.random.Generator, thickness: np.ndarray, phase: list[str]
) -> tuple[np.ndarray, list[str]]:
    """Leave out layers of the thinner phase; what lies on both sides merges."""
    if not recipe.missing or len(thickness) < 12:
        return thickness, phase
    thin = "dark" if recipe.dark_fraction <= 0.5 else "bright"
    inner = [i for i in range(4, len(phase) - 4) if phase[i] == thin]
    rng.shuffle(inner)
    sizes, names = list(thickness), list(phase)
    for i in sorted(inner[: recipe.missing], reverse=True):
        sizes[i - 1 : i + 2] = [sum(sizes[i - 1 : i + 2])]
        names[i - 1 : i + 2] = [names[i - 1]]
    return np.array(sizes), names


def _boundaries(
    recipe: Recipe, rng: np.random.Generator, thickness: np.ndarray, start: float, lateral: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Depth of every boundary at every lateral place, the waviness, and where each boundary exists."""
    count, places = len(thickness), len(lateral)
    wave = np.zeros(places)
    if recipe.wave_amplitude_px:
        turns = max(places / recipe.wave_length_px, 0.5)
        k = np.fft.rfftfreq(places) * places
        band = np.exp(-0.5 * ((k - turns) / max(0.35 * turns, 0.4)) ** 2)
        band[0] = 0
        spectrum = band * (rng.standard_normal(len(k)) + 1j * rng.standard_normal(len(k)))
        wave = np.fft.irfft(spectrum, places)
        wave *= recipe.wave_amplitude_px / max(np.abs(wave).max(), 1e-9)
    shape = np.ones((count, places))
    ended = rng.permutation(np.arange(4, max(count - 4, 5)))[: recipe.terminations] if recipe.terminations else []
    for i in ended:
        at = lateral[0] + (0.3 + 0.4 * rng.random()) * places
        side = rng.choice([-1, 1])
        shape[i] = np.clip(0.5 - side * (lateral - at) / (3 * thickness[i] + 8), 0, 1)
    local = thickness[:, None] * shape if len(ended) else np.broadcast_to(thickness[:, None], shape.shape)
    depth = np.empty((count + 1, places))
    depth[0] = start
    depth[1:] = start + np.cumsum(local, axis=0)
    depth += 0.5 * (thickness[:, None] - local).sum(axis=0)
    if recipe.roughness_px:
        last = np.zeros(places)
        fresh_share = math.sqrt(1 - recipe.replication**2)
        for i in range(count + 1):
            fresh = correlated_noise(rng, places, recipe.correlation_length_px, recipe.hurst)
            last = fresh if i == 0 else recipe.replication * last + fresh_share * fresh
            depth[i] += recipe.roughness_px * last
    depth = np.maximum.accumulate(depth, axis=0)
    exists = np.ones(depth.shape, dtype=bool)
    for i in ended:  # beyond its end the layer has no thickness: neither boundary exists
        middle = 0.5 * (depth[i] + depth[i + 1])
        gone = shape[i] <= 0
        depth[i, gone] = depth[i + 1, gone] = middle[gone]
        exists[i, gone] = exists[i + 1, gone] = False
    return depth + wave, wave, exists


# --- truth ----------------------------------------------------------------------------------------------------------


def _visible(
    recipe: Recipe,
    shape: tuple[int, int],
    centre: tuple[float, float],
    drift: np.ndarray,
    boundary: np.ndarray,
    lateral: np.ndarray,
    hidden: np.ndarray,
) -> np.ndarray:
    row, column = to_picture(recipe, centre, boundary, np.broadcast_to(lateral, boundary.shape))
    column = column - np.interp(row, np.arange(shape[0]), drift)
    rows = shape[0] - recipe.banner_rows
    seen = (row >= 0) & (row <= rows - 1) & (column >= 0) & (column <= shape[1] - 1)
    if recipe.radius_px is not None:
        seen &= boundary + recipe.radius_px > 1
    r = np.clip(np.rint(row).astype(int), 0, shape[0] - 1)
    c = np.clip(np.rint(column).astype(int), 0, shape[1] - 1)
    return seen & ~hidden[r, c]


def _normal_scale(
    recipe: Recipe,
    centre: tuple[float, float],
    shape: tuple[int, int],
    drift: np.ndarray,
    lateral: np.ndarray,
    wave: np.ndarray,
) -> np.ndarray:
    """1/|gradient of the depth| in the picture against lateral place, at mid depth of the frame."""
    slope = np.gradient(wave) if wave.any() else np.zeros(len(lateral))
    shear = float(np.polyfit(np.arange(len(drift)), drift, 1)[0]) if drift.any() else 0.0
    theta = math.radians(recipe.orientation_deg)
    if recipe.radius_px is not None:
        theta = theta + lateral / recipe.radius_px
    # depth rises by (cos, sin) - slope (-sin, cos) per (column, row); a column shift per row adds to the second
    g_column = np.cos(theta) + slope * np.sin(theta)
    g_row = np.sin(theta) - slope * np.cos(theta) + shear * g_column
    return 1 / np.hypot(g_column, g_row)


def _longest_run(phase: tuple[str, ...], required: np.ndarray, per: int) -> tuple[int, int] | None:
    """First and last boundary of the longest run of whole periods among the required boundaries."""
    index = np.flatnonzero(required)
    if len(index) < per + 1:
        return None
    first, last = int(index[0]), int(index[-1])
    last = first + (last - first) // per * per
    return (first, last) if last > first else None


def render_section(
    recipe: Recipe, seed: int, shape: tuple[int, int] = (512, 512), *, kind: str = "own"
) -> tuple[np.ndarray, Truth]:
    """Draw one section.

    Parameters
    ----------
    recipe : Recipe
    seed : int
        The same recipe, seed and shape give the same picture.
    shape : (rows, columns)
    kind : str
        A label kept in the truth.

    Returns
    -------
    image : (rows, columns) array
        float32, or unsigned integers where the recipe names bits.
    truth : Truth
    """
    rng = np.random.default_rng([seed, 20240611])
    centre = find_centre(recipe, shape)
    rows = np.arange(shape[0])
    drift = recipe.drift_px * rows / shape[0]
    if recipe.drift_wander_px:
        drift = drift + recipe.drift_wander_px * correlated_noise(rng, shape[0], shape[0] / 6, 1.0)
    corner_depth, corner_lateral = _frame_range(recipe, centre, shape, drift)
    if recipe.radius_px is None:
        lateral = np.arange(math.floor(corner_lateral[0]) - 40, math.ceil(corner_lateral[1]) + 41, dtype=float)
    else:
        whole = math.pi * recipe.radius_px
        lateral = np.arange(
            math.floor(max(corner_lateral[0] - 40, -whole)), math.ceil(min(corner_lateral[1] + 40, whole)) + 1.0
        )
    thickness, phase, start = _stack(recipe, rng, corner_depth)
    boundary, wave, exists = _boundaries(recipe, rng, thickness, start, lateral)
    names = {"dark": recipe.dark_level, "bright": recipe.bright_level, "middle": recipe.middle_level}
    before = "resin" if recipe.resin_level is not None else _other(phase[0])
    after = "substrate" if recipe.substrate_level is not None else _other(phase[-1])
    outer = (recipe.resin_level, recipe.substrate_level)
    levels = np.array(
        [
            names[before] if outer[0] is None else outer[0],
            *(names[p] for p in phase),
            names[after] if outer[1] is None else outer[1],
        ]
    )
    image = draw_structure(recipe, shape, centre, drift, lateral[0], boundary, wave, levels)
    mean_signal = float(image.mean())
    image, artefact = spoil(recipe, rng, image, recipe.orientation_deg)
    image = record(recipe, rng, image)
    image = quantise(image, recipe.bits)
    if recipe.jpeg_quality is not None:
        image = through_jpeg(image, recipe.jpeg_quality).copy()
    if recipe.banner_rows:
        add_banner(image, recipe.banner_rows, recipe.pixel_size_nm)
        artefact[-recipe.banner_rows :] = True
    truth = _truth(
        recipe,
        seed,
        shape,
        kind,
        centre,
        drift,
        lateral,
        boundary,
        wave,
        exists,
        phase,
        (before, after),
        levels,
        artefact,
        mean_signal,
    )
    return image, truth


def _other(phase: str) -> str:
    return {"dark": "bright", "bright": "dark", "middle": "bright"}[phase]


def _frame_range(
    recipe: Recipe, centre: tuple[float, float], shape: tuple[int, int], drift: np.ndarray
) -> tuple[tuple[float, float], tuple[float, float]]:
    """Range of depth and of lateral place that the frame shows."""
    r = np.concatenate([np.arange(shape[0]), np.arange(shape[0]), np.zeros(shape[1]), np.full(shape[1], shape[0] - 1)])
    c = np.concatenate([np.zeros(shape[0]), np.full(shape[0], shape[1] - 1), np.arange(shape[1]), np.arange(shape[1])])
    depth, lateral = to_layers(recipe, centre, r, c + np.interp(r, np.arange(shape[0]), drift))
    low, high = float(depth.min()), float(depth.max())
    if recipe.radius_px is not None and 0 <= centre[0] < shape[0] and 0 <= centre[1] < shape[1]:
        low = -recipe.radius_px
        return (low, high), (-math.pi * recipe.radius_px, math.pi * recipe.radius_px)
    return (low, high), (float(lateral.min()), float(lateral.max()))


def _stack(recipe: Recipe, rng: np.random.Generator, depth: tuple[float, float]) -> tuple[np.ndarray, list[str], float]:
    """Thicknesses, phases and the depth of the first boundary."""
    per = 4 if recipe.middle_fraction else 2
    span = depth[1] - depth[0]
    if recipe.layers is not None:
        thickness, phase = _thicknesses(recipe, rng, recipe.layers // per + 1)
        thickness, phase = _drop_missing(recipe, rng, thickness[: recipe.layers], phase[: recipe.layers])
        total = float(thickness.sum())
        return thickness, phase, depth[0] + (0.5 + 0.3 * (recipe.phase_offset % 1 - 0.5)) * (span - total)
    margin = 3 * recipe.period_px + 4 * recipe.roughness_px + 2 * recipe.wave_amplitude_px
    resin = recipe.resin_level is not None
    substrate = recipe.substrate_level is not None
    periods = math.ceil((span + 2 * margin) / recipe.period_px * (1 + 2 * recipe.cv_dark)) + 2
    thickness, phase = _thicknesses(recipe, rng, periods)
    thickness, phase = _drop_missing(recipe, rng, thickness, phase)
    low = depth[0] + 0.22 * span if resin else depth[0] - margin - recipe.phase_offset % 1 * recipe.period_px
    if recipe.radius_px is not None:
        low = max(low, -recipe.radius_px + 0.5 * recipe.period_px)
    high = depth[1] - 0.2 * span if substrate else depth[1] + margin
    keep = int(np.searchsorted(np.cumsum(thickness), high - low))
    return thickness[:keep], phase[:keep], low


def _truth(
    recipe: Recipe,
    seed: int,
    shape: tuple[int, int],
    kind: str,
    centre: tuple[float, float],
    drift: np.ndarray,
    lateral: np.ndarray,
    boundary: np.ndarray,
    wave: np.ndarray,
    exists: np.ndarray,
    phase: list[str],
    outer: tuple[str, str],
    levels: np.ndarray,
    artefact: np.ndarray,
    mean_signal: float,
) -> Truth:
    in_frame = _visible(recipe, shape, centre, drift, boundary, lateral, np.zeros(shape, dtype=bool)) & exists
    shown = np.flatnonzero(in_frame.any(axis=1))
    first, last = (int(shown[0]), int(shown[-1])) if len(shown) else (0, 0)
    keep = slice(first, last + 1)
    swap = {"dark": "bright", "bright": "dark"} if recipe.inverted else {}
    all_phases = [outer[0], *phase, outer[1]]
    all_phases = [swap.get(name, name) for name in all_phases]
    clear = _visible(recipe, shape, centre, drift, boundary[keep], lateral, artefact) & exists[keep]
    scale = _normal_scale(recipe, centre, shape, drift, lateral, wave)
    visible_px = in_frame[keep].sum(axis=1)
    if recipe.radius_px is not None:  # lateral places are counted at the reference radius
        visible_px = (
            visible_px * np.clip((boundary[keep].mean(axis=1) + recipe.radius_px) / recipe.radius_px, 0, None)
        ).astype(int)
    thickness = []
    for i in range(first, last):
        both = in_frame[i] & in_frame[i + 1]
        both = both if both.any() else exists[i] & exists[i + 1]
        both = both if both.any() else np.ones(len(lateral), dtype=bool)
        thickness.append(float(np.mean((boundary[i + 1] - boundary[i])[both] * scale[both])))
    rough = [
        float(np.std((boundary[i] - wave)[in_frame[i]])) if in_frame[i].any() else 0.0 for i in range(first, last + 1)
    ]
    contrast = abs(recipe.bright_level - recipe.dark_level)
    poisson = mean_signal / recipe.dose if recipe.dose else 0.0
    inside = recipe.radius_px is not None and 0 <= centre[0] < shape[0] and 0 <= centre[1] < shape[1]
    truth = Truth(
        kind=kind, seed=seed, shape=shape, recipe=recipe, lateral_px=lateral, boundary_depth_px=boundary[keep],
        wave_px=wave, exists=exists[keep], visible_px=visible_px, visible_from=clear,
        layer_phase=tuple(all_phases[first + 1 : last + 1]), outer_phase=(all_phases[first], all_phases[last + 1]),
        step=np.diff(levels)[keep], thickness_px=np.array(thickness),
        period_px=None, period_n=0, period_ends=None,
        orientation_deg=None if inside else _mean_orientation(recipe, centre, shape, drift, lateral, wave),
        blur_px=recipe.blur_px, noise=math.sqrt(recipe.noise**2 + poisson), contrast=contrast,
        roughness_px=np.array(rough), artefact=artefact, drift=drift,
        pixel_size_nm=recipe.pixel_size_nm, centre=centre, normal_scale=scale,
    )  # fmt: skip
    ends = None
    if not recipe.missing and len(shown):
        ends = _longest_run(truth.layer_phase, truth.required(), 4 if recipe.middle_fraction else 2)
    if ends is None:
        return truth
    return dataclasses.replace(
        truth, period_px=truth.mean_period_px(*ends), period_n=truth.whole_periods(*ends), period_ends=ends
    )


def _mean_orientation(
    recipe: Recipe,
    centre: tuple[float, float],
    shape: tuple[int, int],
    drift: np.ndarray,
    lateral: np.ndarray,
    wave: np.ndarray,
) -> float:
    """Direction of the normal averaged over the frame as an axis (double-angle mean), waviness and drift included."""
    shear = float(np.polyfit(np.arange(len(drift)), drift, 1)[0]) if drift.any() else 0.0
    r, c = np.mgrid[0 : shape[0] - recipe.banner_rows : 8, 0 : shape[1] : 8].astype(float)
    _, place = to_layers(recipe, centre, r, c + np.interp(r, np.arange(len(drift)), drift))
    theta = np.radians(recipe.orientation_deg) if recipe.radius_px is None else np.arctan2(r - centre[0], c - centre[1])
    slope = np.interp(place, lateral, np.gradient(wave))
    g_column, g_row = np.cos(theta) + slope * np.sin(theta), np.sin(theta) - slope * np.cos(theta)
    angle = np.arctan2(g_row + shear * g_column, g_column)
    return float(np.degrees(np.angle(np.mean(np.exp(2j * angle))) / 2) % 180)


def draw_recipe(kind: str, seed: int, shape: tuple[int, int] = (512, 512)) -> Recipe:
    """Recipe of a named kind (``KINDS``), drawn with the seed."""
    if kind not in KINDS:
        raise ValueError(f"Kind '{kind}' is not known. Choose one of {', '.join(KINDS)}.")
    rng = np.random.default_rng([seed, KINDS.index(kind), 77])
    size = min(max(min(shape), 256), 1024)  # periods suit a frame of this size
    draw = DRAWS[kind](rng, size)
    draw.setdefault("orientation_deg", float(rng.uniform(0, 180)))
    draw.setdefault("phase_offset", float(rng.random()))
    draw.setdefault("inverted", bool(rng.random() < 0.3))
    draw.setdefault("pixel_size_nm", float(rng.choice([1.0, 2.5, 4.0, 8.0])))
    return Recipe(**draw)


def make_section(kind: str, seed: int, shape: tuple[int, int] = (512, 512)) -> tuple[np.ndarray, Truth]:
    """Section of a named kind (``KINDS``) and its truth; the same kind, seed and shape give the same picture."""
    recipe = draw_recipe(kind, seed, shape)
    recipe = dataclasses.replace(recipe, bits=None if recipe.bits is None else int(recipe.bits))
    return render_section(recipe, seed, shape, kind=kind)
