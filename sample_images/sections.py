"""Test sections of layered structures with their full truth, written from the physics; everything here is invented.

A ``Recipe`` says what the specimen, the section and the microscope are like; ``render_section`` draws it and returns the
image together with a ``Truth`` that knows where every boundary lies. ``make_section`` draws a recipe of a named kind.
Pictures without layers are in ``negatives.py``.

Conventions: points are (row, column); ``depth`` is the distance along the layer normal and ``lateral`` the distance along
the layers, both in pixels; ``orientation_deg`` is the direction of the normal from the +column axis towards the +row axis.
"""

from __future__ import annotations

import dataclasses
import io
import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import ndimage
from scipy.special import ndtr

KINDS = ("easy", "moderate", "tem", "sem", "hard", "brutal")
_STRIP = 256  # rows drawn at a time, so that large pictures need little memory


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
        return _coordinates(self.recipe, self.centre, row, column + np.interp(row, np.arange(len(self.drift)), self.drift))

    def points(self, depth: Any, lateral: Any) -> tuple[np.ndarray, np.ndarray]:
        """Row and column of places given by depth and lateral place: the inverse of ``coordinates``."""
        row, column = _points(self.recipe, self.centre, np.asarray(depth, float), np.asarray(lateral, float))
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


# --- geometry -------------------------------------------------------------------------------------------------------


def _coordinates(recipe: Recipe, centre: tuple[float, float], row: np.ndarray, column: np.ndarray) -> Any:
    y, x = row - centre[0], column - centre[1]
    theta = math.radians(recipe.orientation_deg)
    if recipe.radius_px is None:
        return x * math.cos(theta) + y * math.sin(theta), -x * math.sin(theta) + y * math.cos(theta)
    angle = np.arctan2(-x * math.sin(theta) + y * math.cos(theta), x * math.cos(theta) + y * math.sin(theta))
    return np.hypot(x, y) - recipe.radius_px, angle * recipe.radius_px


def _points(recipe: Recipe, centre: tuple[float, float], depth: np.ndarray, lateral: np.ndarray) -> Any:
    theta = math.radians(recipe.orientation_deg)
    if recipe.radius_px is None:
        row = centre[0] + depth * math.sin(theta) + lateral * math.cos(theta)
        return row, centre[1] + depth * math.cos(theta) - lateral * math.sin(theta)
    angle = lateral / recipe.radius_px + theta
    radius = depth + recipe.radius_px
    return centre[0] + radius * np.sin(angle), centre[1] + radius * np.cos(angle)


def _centre(recipe: Recipe, shape: tuple[int, int]) -> tuple[float, float]:
    middle = ((shape[0] - recipe.banner_rows - 1) / 2, (shape[1] - 1) / 2)
    if recipe.radius_px is None:
        return middle
    if recipe.centre is not None:
        return recipe.centre
    theta = math.radians(recipe.orientation_deg)
    return middle[0] - recipe.radius_px * math.sin(theta), middle[1] - recipe.radius_px * math.cos(theta)


# --- the specimen ---------------------------------------------------------------------------------------------------


def correlated_noise(
    rng: np.random.Generator, length: int, correlation_length: float, hurst: float = 0.7
) -> np.ndarray:
    """Noise of unit rms on a periodic grid with the spectrum 1/(1 + (k xi)^2)^(1/2 + H) of a self-affine interface."""
    k = np.fft.rfftfreq(length) * 2 * math.pi
    shape = (1 + (k * correlation_length) ** 2) ** (-(0.5 + hurst) / 2)
    shape[0] = 0.0
    weights = np.full(len(k), 2.0)
    weights[0] = 1.0
    if length % 2 == 0:
        weights[-1] = 1.0
    power = np.sum(weights * shape**2) / length
    return np.fft.irfft(np.fft.rfft(rng.standard_normal(length)) * shape, length) / math.sqrt(power)


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


# --- drawing --------------------------------------------------------------------------------------------------------


def edge(distance: np.ndarray, blur: float, box: float = 0.0) -> np.ndarray:
    """Unit step seen through a Gaussian blur and a box: the projection of a tilted flat boundary."""
    if box < 1e-6:
        return ndtr(distance / blur)
    half = box / 2

    def integral(u: np.ndarray) -> np.ndarray:
        return u * ndtr(u) + np.exp(-0.5 * u * u) / math.sqrt(2 * math.pi)

    return blur / box * (integral((distance + half) / blur) - integral((distance - half) / blur))


def _draw_strip(
    recipe: Recipe,
    depth: np.ndarray,
    lateral: np.ndarray,
    origin: float,
    boundary: np.ndarray,
    wave: np.ndarray,
    levels: np.ndarray,
    blur: float,
    bumps: np.ndarray,
) -> np.ndarray:
    """Sum of the steps of all boundaries at the given places; each is worked out only near itself."""
    places = boundary.shape[1]
    u = np.clip(lateral.ravel() - origin, 0, places - 1.000001)
    left = u.astype(np.int64)
    part = u - left
    flat_depth = depth.ravel()
    level_depth = flat_depth - (wave[left] * (1 - part) + wave[left + 1] * part)
    slope = np.gradient(wave) if wave.any() else wave
    shrink = 1 / np.sqrt(1 + slope**2)
    order = np.argsort(level_depth, kind="stable")
    ordered = level_depth[order]
    value = np.zeros(len(ordered))
    jump = np.zeros(len(ordered) + 1)
    jump[0] = levels[0]
    reach = 5.5 * blur + 0.5 * recipe.projection_px
    if np.any(bumps):
        reach = max(reach, 6 * recipe.edge_bump_px)
    smooth = boundary - wave
    low = np.searchsorted(ordered, smooth.min(axis=1) - reach)
    high = np.searchsorted(ordered, smooth.max(axis=1) + reach)
    for i in range(len(boundary)):
        jump[high[i]] += levels[i + 1] - levels[i]
        if low[i] == high[i]:
            continue
        index = order[low[i] : high[i]]
        j, f = left[index], part[index]
        place = boundary[i, j] * (1 - f) + boundary[i, j + 1] * f
        distance = (flat_depth[index] - place) * shrink[j]
        value[low[i] : high[i]] += (levels[i + 1] - levels[i]) * edge(distance, blur, recipe.projection_px)
        if bumps[i]:
            offset = 0.4 * recipe.edge_bump_px * np.sign(levels[i + 1] - levels[i])
            value[low[i] : high[i]] += bumps[i] * np.exp(-0.5 * ((distance - offset) / recipe.edge_bump_px) ** 2)
    value += np.cumsum(jump[:-1])
    out = np.empty(len(value))
    out[order] = value
    return out.reshape(depth.shape)


def _draw_structure(
    recipe: Recipe,
    shape: tuple[int, int],
    centre: tuple[float, float],
    drift: np.ndarray,
    origin: float,
    boundary: np.ndarray,
    wave: np.ndarray,
    levels: np.ndarray,
) -> np.ndarray:
    """Noise-free signal of the whole frame, float32."""
    mass = recipe.mass_thickness
    drawn = -np.log(levels) if mass else levels
    inner = 0.5 if mass else recipe.blur_px
    outer = math.sqrt(max(recipe.blur_px**2 - inner**2, 0.0)) if mass else 0.0
    halo = math.ceil(5 * outer)
    contrast = abs(recipe.bright_level - recipe.dark_level)
    bumps = np.where(np.abs(np.diff(levels)) > 0.2 * contrast, recipe.edge_bump * contrast, 0.0)
    image = np.empty(shape, dtype=np.float32)
    column = np.arange(-halo, shape[1] + halo, dtype=float)
    for top in range(0, shape[0], _STRIP):
        bottom = min(top + _STRIP, shape[0])
        row = np.arange(top - halo, bottom + halo, dtype=float)
        shift = np.interp(row, np.arange(shape[0]), drift)
        depth, lateral = _coordinates(recipe, centre, row[:, None], column[None, :] + shift[:, None])
        strip = _draw_strip(recipe, depth, lateral, origin, boundary, wave, drawn, inner, bumps)
        if mass:
            strip = np.exp(-strip)
            if outer > 0:
                strip = ndimage.gaussian_filter(strip, outer, truncate=5)
            strip = strip[halo : halo + bottom - top, halo : halo + shape[1]]
        image[top:bottom] = strip
    return image


def smooth_field(rng: np.random.Generator, shape: tuple[int, int], scale: float) -> np.ndarray:
    """Smooth random field of unit rms, drawn small and enlarged."""
    small = (max(int(shape[0] / scale), 3) + 3, max(int(shape[1] / scale), 3) + 3)
    field = ndimage.gaussian_filter(rng.standard_normal(small), 1.0)
    zoom = ndimage.zoom(field, ((shape[0]) / (small[0] - 2), shape[1] / (small[1] - 2)), order=3)
    zoom = zoom[: shape[0], : shape[1]]
    return zoom / max(zoom.std(), 1e-9)


def _spoil(
    recipe: Recipe, rng: np.random.Generator, image: np.ndarray, orientation_deg: float
) -> tuple[np.ndarray, np.ndarray]:
    """Shading, curtains, cracks and debris; returns the image and the mask of what hides the specimen."""
    shape = image.shape
    artefact = np.zeros(shape, dtype=bool)
    if recipe.shading:
        image *= (1 + recipe.shading * 0.5 * smooth_field(rng, shape, max(shape) / 2.5)).astype(np.float32)
    if recipe.curtains:
        along = math.radians(orientation_deg if recipe.curtain_deg is None else recipe.curtain_deg)
        y, x = np.arange(shape[0])[:, None], np.arange(shape[1])[None, :]
        across = -x * math.sin(along) + y * math.cos(along)
        length = int(math.ceil(np.ptp(across))) + 3
        stripes = 0.7 * correlated_noise(rng, length, 12.0, 0.5) + 0.7 * correlated_noise(rng, length, 2.0, 0.5)
        image *= (1 + recipe.curtains * np.interp(across - across.min(), np.arange(length), stripes)).astype(np.float32)
    for _ in range(recipe.cracks):
        _draw_crack(rng, image, artefact, orientation_deg)
    for _ in range(recipe.debris):
        _draw_debris(rng, image, artefact)
    return image, artefact


def _draw_crack(rng: np.random.Generator, image: np.ndarray, artefact: np.ndarray, orientation_deg: float) -> None:
    """Dark jagged line that runs roughly along the layer normal."""
    shape = image.shape
    along = math.radians(orientation_deg + rng.normal(0, 20))
    row, column = rng.uniform(0.2, 0.8) * shape[0], rng.uniform(0.2, 0.8) * shape[1]
    half = rng.uniform(0.2, 0.7) * min(shape) / 2
    t = np.arange(-half, half)
    wander = 6 * correlated_noise(rng, len(t), 25.0, 0.6)
    width = rng.uniform(1.5, 4) * np.sqrt(np.clip(1 - (t / half) ** 2, 0.02, 1))
    mask = np.zeros(shape, dtype=bool)
    for w in np.linspace(-1, 1, 13):
        r = row + t * math.sin(along) + (wander + w * width) * math.cos(along)
        c = column + t * math.cos(along) - (wander + w * width) * math.sin(along)
        ok = (r >= 0) & (r < shape[0] - 1) & (c >= 0) & (c < shape[1] - 1)
        mask[np.rint(r[ok]).astype(int), np.rint(c[ok]).astype(int)] = True
    mask = ndimage.binary_closing(mask, iterations=1) | mask
    soft = ndimage.gaussian_filter(mask.astype(np.float32), 0.8)
    image += soft * (0.05 - image)
    artefact |= soft > 0.05


def _draw_debris(rng: np.random.Generator, image: np.ndarray, artefact: np.ndarray) -> None:
    """A particle with a ragged outline, brighter or darker than the specimen."""
    shape = image.shape
    size = rng.uniform(6, 0.05 * min(shape) + 8)
    row, column = rng.uniform(0, shape[0]), rng.uniform(0, shape[1])
    reach = int(2 * size)
    r0, r1 = max(int(row) - reach, 0), min(int(row) + reach, shape[0])
    c0, c1 = max(int(column) - reach, 0), min(int(column) + reach, shape[1])
    if r1 <= r0 or c1 <= c0:
        return
    y, x = np.mgrid[r0:r1, c0:c1]
    angle = np.arctan2(y - row, x - column)
    outline = size * (1 + sum(rng.normal(0, 0.15) * np.cos(m * angle + rng.uniform(0, 6.3)) for m in (1, 2, 3)))
    soft = ndtr((outline - np.hypot(y - row, x - column)) / 1.0).astype(np.float32)
    level = rng.choice([0.02, 0.98])
    image[r0:r1, c0:c1] += soft * (level - image[r0:r1, c0:c1])
    artefact[r0:r1, c0:c1] |= soft > 0.05


def _record(recipe: Recipe, rng: np.random.Generator, image: np.ndarray) -> np.ndarray:
    """Noise, charging rows, gamma, inversion, quantisation."""
    shape = image.shape
    if recipe.dose is not None:
        image = (rng.poisson(np.clip(image, 0, None) * recipe.dose) / recipe.dose).astype(np.float32)
    if recipe.noise:
        noise = rng.standard_normal(shape, dtype=np.float32)
        if recipe.noise_blur_px:
            noise = ndimage.gaussian_filter(noise, recipe.noise_blur_px)
            noise /= noise.std()
        image = image + recipe.noise * noise
    if recipe.charging:
        rows = 0.6 * rng.standard_normal(shape[0]) + 0.8 * correlated_noise(rng, shape[0], 6.0, 0.5)
        image = image + (recipe.charging * rows[:, None]).astype(np.float32)
        for row in rng.integers(0, shape[0], max(shape[0] // 100, 1)):  # streaks that decay along the fast axis
            at = rng.integers(0, shape[1])
            tail = np.exp(-np.arange(shape[1] - at) / rng.uniform(20, 120))
            image[row, at:] += (3 * recipe.charging * rng.choice([-1, 1]) * tail).astype(np.float32)
    if recipe.gamma != 1.0:
        image = np.clip(image, 0, None) ** recipe.gamma
    if recipe.inverted:
        image = 1 - image
    return image


def quantise(image: np.ndarray, bits: int | None) -> np.ndarray:
    """Signal 0 to 1 as unsigned integers of 8 or 16 bits, or unchanged float32."""
    if bits is None:
        return image.astype(np.float32)
    top = 2**bits - 1
    return np.clip(np.rint(image * top), 0, top).astype(np.uint8 if bits == 8 else np.uint16)


def _jpeg(image: np.ndarray, quality: int) -> np.ndarray:
    from PIL import Image

    buffer = io.BytesIO()
    Image.fromarray(image).save(buffer, format="JPEG", quality=quality)
    return np.asarray(Image.open(buffer))


def _banner(image: np.ndarray, rows: int, pixel_size_nm: float) -> None:
    """Information strip at the bottom: black, with text and a scale bar, drawn over the picture in place."""
    from PIL import Image, ImageDraw

    top = {np.dtype(np.uint8): 255, np.dtype(np.uint16): 65535}.get(image.dtype, 1)
    width = image.shape[1]
    strip = Image.new("L", (width, rows), 0)
    draw = ImageDraw.Draw(strip)
    length_nm = 10 ** math.floor(math.log10(0.3 * width * pixel_size_nm))
    length = length_nm / pixel_size_nm
    y = rows // 2
    draw.rectangle([10, y - 2, 10 + length, y + 2], fill=255)
    draw.text((20 + length, y - 6), f"{length_nm:g} nm   5.00 kV   WD 4.1 mm   test section, invented", fill=255)
    image[-rows:] = (np.asarray(strip, dtype=float) / 255 * top).astype(image.dtype)


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
    row, column = _points(recipe, centre, boundary, np.broadcast_to(lateral, boundary.shape))
    column = column - np.interp(row, np.arange(shape[0]), drift)
    rows = shape[0] - recipe.banner_rows
    seen = (row >= 0) & (row <= rows - 1) & (column >= 0) & (column <= shape[1] - 1)
    if recipe.radius_px is not None:
        seen &= boundary + recipe.radius_px > 1
    r = np.clip(np.rint(row).astype(int), 0, shape[0] - 1)
    c = np.clip(np.rint(column).astype(int), 0, shape[1] - 1)
    return seen & ~hidden[r, c]


def _normal_scale(
    recipe: Recipe, centre: tuple[float, float], shape: tuple[int, int], drift: np.ndarray, lateral: np.ndarray, wave: np.ndarray
) -> np.ndarray:
    """1/|gradient of the depth| in the picture against lateral place, at mid depth of the frame."""
    slope = np.gradient(wave) if wave.any() else np.zeros(len(lateral))
    shear = float(np.polyfit(np.arange(len(drift)), drift, 1)[0]) if drift.any() else 0.0
    theta = math.radians(recipe.orientation_deg)
    if recipe.radius_px is not None:
        theta = theta + lateral / recipe.radius_px
    # depth rises by (cos, sin) - slope (-sin, cos) per (column, row); a column shift of `shear` per row adds to the row part
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


def render_section(recipe: Recipe, seed: int, shape: tuple[int, int] = (512, 512), *, kind: str = "own") -> tuple[np.ndarray, Truth]:
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
    centre = _centre(recipe, shape)
    rows = np.arange(shape[0])
    drift = recipe.drift_px * rows / shape[0]
    if recipe.drift_wander_px:
        drift = drift + recipe.drift_wander_px * correlated_noise(rng, shape[0], shape[0] / 6, 1.0)
    corner_depth, corner_lateral = _frame_range(recipe, centre, shape, drift)
    if recipe.radius_px is None:
        lateral = np.arange(math.floor(corner_lateral[0]) - 40, math.ceil(corner_lateral[1]) + 41, dtype=float)
    else:
        whole = math.pi * recipe.radius_px
        lateral = np.arange(math.floor(max(corner_lateral[0] - 40, -whole)), math.ceil(min(corner_lateral[1] + 40, whole)) + 1.0)
    thickness, phase, start = _stack(recipe, rng, corner_depth)
    boundary, wave, exists = _boundaries(recipe, rng, thickness, start, lateral)
    names = {"dark": recipe.dark_level, "bright": recipe.bright_level, "middle": recipe.middle_level}
    before = "resin" if recipe.resin_level is not None else _other(phase[0])
    after = "substrate" if recipe.substrate_level is not None else _other(phase[-1])
    outer = (recipe.resin_level, recipe.substrate_level)
    levels = np.array(
        [names[before] if outer[0] is None else outer[0], *(names[p] for p in phase), names[after] if outer[1] is None else outer[1]]
    )
    image = _draw_structure(recipe, shape, centre, drift, lateral[0], boundary, wave, levels)
    mean_signal = float(image.mean())
    image, artefact = _spoil(recipe, rng, image, recipe.orientation_deg)
    image = _record(recipe, rng, image)
    image = quantise(image, recipe.bits)
    if recipe.jpeg_quality is not None:
        image = _jpeg(image, recipe.jpeg_quality).copy()
    if recipe.banner_rows:
        _banner(image, recipe.banner_rows, recipe.pixel_size_nm)
        artefact[-recipe.banner_rows :] = True
    truth = _truth(recipe, seed, shape, kind, centre, drift, lateral, boundary, wave, exists, phase, (before, after), levels, artefact, mean_signal)
    return image, truth


def _other(phase: str) -> str:
    return {"dark": "bright", "bright": "dark", "middle": "bright"}[phase]


def _frame_range(
    recipe: Recipe, centre: tuple[float, float], shape: tuple[int, int], drift: np.ndarray
) -> tuple[tuple[float, float], tuple[float, float]]:
    """Range of depth and of lateral place that the frame shows."""
    r = np.concatenate([np.arange(shape[0]), np.arange(shape[0]), np.zeros(shape[1]), np.full(shape[1], shape[0] - 1)])
    c = np.concatenate([np.zeros(shape[0]), np.full(shape[0], shape[1] - 1), np.arange(shape[1]), np.arange(shape[1])])
    depth, lateral = _coordinates(recipe, centre, r, c + np.interp(r, np.arange(shape[0]), drift))
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
        visible_px = (visible_px * np.clip((boundary[keep].mean(axis=1) + recipe.radius_px) / recipe.radius_px, 0, None)).astype(int)
    thickness = []
    for i in range(first, last):
        both = in_frame[i] & in_frame[i + 1]
        both = both if both.any() else exists[i] & exists[i + 1]
        both = both if both.any() else np.ones(len(lateral), dtype=bool)
        thickness.append(float(np.mean((boundary[i + 1] - boundary[i])[both] * scale[both])))
    rough = [float(np.std((boundary[i] - wave)[in_frame[i]])) if in_frame[i].any() else 0.0 for i in range(first, last + 1)]
    contrast = abs(recipe.bright_level - recipe.dark_level)
    poisson = mean_signal / recipe.dose if recipe.dose else 0.0
    inside = recipe.radius_px is not None and 0 <= centre[0] < shape[0] and 0 <= centre[1] < shape[1]
    truth = Truth(
        kind=kind, seed=seed, shape=shape, recipe=recipe, lateral_px=lateral, boundary_depth_px=boundary[keep], wave_px=wave,
        exists=exists[keep], visible_px=visible_px, visible_from=clear, layer_phase=tuple(all_phases[first + 1 : last + 1]),
        outer_phase=(all_phases[first], all_phases[last + 1]), step=np.diff(levels)[keep], thickness_px=np.array(thickness),
        period_px=None, period_n=0, period_ends=None,
        orientation_deg=None if inside else _mean_orientation(recipe, centre, shape, drift, lateral, wave),
        blur_px=recipe.blur_px, noise=math.sqrt(recipe.noise**2 + poisson), contrast=contrast, roughness_px=np.array(rough),
        artefact=artefact, drift=drift, pixel_size_nm=recipe.pixel_size_nm, centre=centre, normal_scale=scale,
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
    _, place = _coordinates(recipe, centre, r, c + np.interp(r, np.arange(len(drift)), drift))
    theta = np.radians(recipe.orientation_deg) if recipe.radius_px is None else np.arctan2(r - centre[0], c - centre[1])
    slope = np.interp(place, lateral, np.gradient(wave))
    g_column, g_row = np.cos(theta) + slope * np.sin(theta), np.sin(theta) - slope * np.cos(theta)
    angle = np.arctan2(g_row + shear * g_column, g_column)
    return float(np.degrees(np.angle(np.mean(np.exp(2j * angle))) / 2) % 180)


# --- named kinds ----------------------------------------------------------------------------------------------------


def draw_recipe(kind: str, seed: int, shape: tuple[int, int] = (512, 512)) -> Recipe:
    """Recipe of a named kind (``KINDS``), drawn with the seed."""
    if kind not in KINDS:
        raise ValueError(f"Kind '{kind}' is not known. Choose one of {', '.join(KINDS)}.")
    rng = np.random.default_rng([seed, KINDS.index(kind), 77])
    size = min(max(min(shape), 256), 1024)  # periods suit a frame of this size
    draw = _DRAWS[kind](rng, size)
    draw.setdefault("orientation_deg", float(rng.uniform(0, 180)))
    draw.setdefault("phase_offset", float(rng.random()))
    draw.setdefault("inverted", bool(rng.random() < 0.3))
    draw.setdefault("pixel_size_nm", float(rng.choice([1.0, 2.5, 4.0, 8.0])))
    return Recipe(**draw)


def _levels(rng: np.random.Generator, contrast: float) -> dict[str, float]:
    middle = rng.uniform(0.42, 0.58)
    return {"dark_level": middle - contrast / 2, "bright_level": middle + contrast / 2}


def _third_levels(rng: np.random.Generator, levels: dict[str, float], chance: float) -> dict[str, float]:
    out: dict[str, float] = {}
    low, high = levels["dark_level"], levels["bright_level"]
    if rng.random() < chance:
        out["resin_level"] = float(low + rng.choice([-0.3, 0.35, 0.5]) * (high - low))
    if rng.random() < chance:
        out["substrate_level"] = float(low + rng.choice([0.5, 0.65, 1.3]) * (high - low))
    return {name: float(np.clip(value, 0.03, 0.97)) for name, value in out.items()}


def _easy(rng: np.random.Generator, size: int) -> dict[str, Any]:
    contrast = rng.uniform(0.35, 0.55)
    levels = _levels(rng, contrast)
    return {
        "period_px": rng.uniform(16, size / 11),
        "dark_fraction": rng.uniform(0.38, 0.62),
        "law": str(rng.choice(["normal", "lognormal", "lattice"])),
        "cv_dark": rng.uniform(0.0, 0.07),
        "cv_bright": rng.uniform(0.0, 0.07),
        "wave_amplitude_px": rng.uniform(0, 2),
        "wave_length_px": rng.uniform(0.6, 1.5) * size,
        "roughness_px": rng.uniform(0, 0.4),
        "correlation_length_px": rng.uniform(10, 40),
        "replication": rng.uniform(0, 0.6),
        "blur_px": rng.uniform(0.8, 1.4),
        "noise": contrast * rng.uniform(0.04, 0.2),
        "bits": rng.choice([8, 16, None]),
        **levels,
    }  # fmt: skip


def _moderate(rng: np.random.Generator, size: int) -> dict[str, Any]:
    contrast = rng.uniform(0.25, 0.5)
    levels = _levels(rng, contrast)
    return {
        "period_px": rng.uniform(14, size / 12),
        "dark_fraction": rng.uniform(0.32, 0.68),
        "law": str(rng.choice(["normal", "lognormal"])),
        "cv_dark": rng.uniform(0.04, 0.14),
        "cv_bright": rng.uniform(0.04, 0.14),
        "correlation": float(rng.choice([0, 0, 0.5])),
        "chirp": float(rng.choice([0, 0, 0.3, -0.3])),
        "radius_px": float(rng.uniform(3, 10) * size) if rng.random() < 0.4 else None,
        "wave_amplitude_px": rng.uniform(1, 6),
        "wave_length_px": rng.uniform(0.6, 1.5) * size,
        "roughness_px": rng.uniform(0.2, 0.9),
        "correlation_length_px": rng.uniform(10, 40),
        "replication": rng.uniform(0, 0.8),
        "blur_px": rng.uniform(0.9, 1.6),
        "noise": contrast * rng.uniform(0.15, 0.45),
        "shading": rng.uniform(0, 0.15),
        "gamma": float(rng.choice([1, 1, rng.uniform(0.85, 1.2)])),
        "bits": rng.choice([8, 16]),
        **levels, **_third_levels(rng, levels, 0.3),
    }  # fmt: skip


def _tem(rng: np.random.Generator, size: int) -> dict[str, Any]:
    contrast = rng.uniform(0.15, 0.4)
    levels = _levels(rng, contrast)
    period = rng.uniform(20, size / 11)
    dark = rng.uniform(0.35, 0.65)
    thin = period * min(dark, 1 - dark)
    return {
        "period_px": period, "dark_fraction": dark,
        "law": str(rng.choice(["normal", "lognormal"])),
        "cv_dark": rng.uniform(0.03, 0.12),
        "cv_bright": rng.uniform(0.03, 0.12),
        "wave_amplitude_px": rng.uniform(0, 5),
        "wave_length_px": rng.uniform(0.6, 1.5) * size,
        "roughness_px": rng.uniform(0.1, 0.7),
        "correlation_length_px": rng.uniform(10, 40),
        "replication": rng.uniform(0, 0.8),
        "blur_px": rng.uniform(0.9, 1.5),
        "projection_px": float(min(rng.uniform(0, 5), 0.45 * thin)),
        "mass_thickness": True,
        "dose": float(np.exp(rng.uniform(np.log(60), np.log(600)))),
        "noise": 0.01,
        "shading": rng.uniform(0, 0.1),
        "bits": rng.choice([16, None]),
        **levels, **_third_levels(rng, levels, 0.35),
    }  # fmt: skip


def _sem(rng: np.random.Generator, size: int) -> dict[str, Any]:
    contrast = rng.uniform(0.25, 0.45)
    levels = _levels(rng, contrast)
    return {
        "period_px": rng.uniform(18, size / 11),
        "dark_fraction": rng.uniform(0.33, 0.67),
        "law": str(rng.choice(["normal", "lognormal"])),
        "cv_dark": rng.uniform(0.04, 0.14),
        "cv_bright": rng.uniform(0.04, 0.14),
        "wave_amplitude_px": rng.uniform(0, 5),
        "wave_length_px": rng.uniform(0.6, 1.5) * size,
        "roughness_px": rng.uniform(0.2, 0.9),
        "correlation_length_px": rng.uniform(10, 40),
        "replication": rng.uniform(0, 0.8),
        "blur_px": rng.uniform(1.0, 1.8),
        "edge_bump": rng.uniform(0.05, 0.3),
        "edge_bump_px": rng.uniform(1.2, 2.4),
        "noise": contrast * rng.uniform(0.15, 0.45),
        "curtains": rng.uniform(0, 0.06),
        "charging": contrast * rng.uniform(0, 0.1),
        "shading": rng.uniform(0, 0.15),
        "gamma": rng.uniform(0.7, 1.4),
        "bits": 8, "inverted": False,
        "banner_rows": int(size * 0.08) if rng.random() < 0.5 else 0,
        **levels, **_third_levels(rng, levels, 0.35),
    }  # fmt: skip


def _hard(rng: np.random.Generator, size: int) -> dict[str, Any]:
    base = _moderate(rng, size)
    contrast = base["bright_level"] - base["dark_level"]
    base.update(
        cv_dark=rng.uniform(0.08, 0.2), cv_bright=rng.uniform(0.08, 0.2),
        period_px=rng.uniform(14, size / 14),
        wave_amplitude_px=rng.uniform(3, 12), wave_length_px=rng.uniform(0.5, 1.2) * size,
        radius_px=float(rng.uniform(0.9, 3) * size) if rng.random() < 0.4 else None,
        roughness_px=rng.uniform(0.4, 1.2), noise=contrast * rng.uniform(0.3, 0.7),
        curtains=rng.uniform(0, 0.06), charging=contrast * rng.uniform(0, 0.1),
        cracks=int(rng.integers(0, 3)), debris=int(rng.integers(0, 4)),
        missing=int(rng.random() < 0.3), terminations=int(rng.random() < 0.4),
        edge_bump=float(rng.choice([0, rng.uniform(0, 0.25)])), bits=8,
    )  # fmt: skip
    return base


def _brutal(rng: np.random.Generator, size: int) -> dict[str, Any]:
    base = _hard(rng, size)
    contrast = base["bright_level"] - base["dark_level"]
    inside = rng.random() < 0.2
    base.update(
        period_px=rng.uniform(10, size / 14), dark_fraction=rng.uniform(0.22, 0.78),
        noise=contrast * rng.uniform(0.5, 1.1),
        drift_px=float(rng.normal(0, 8)), drift_wander_px=rng.uniform(0, 1.5),
        jpeg_quality=int(rng.integers(50, 90)) if rng.random() < 0.5 else None,
        banner_rows=int(size * 0.08) if rng.random() < 0.3 else 0,
        cracks=int(rng.integers(0, 4)), debris=int(rng.integers(0, 6)),
    )  # fmt: skip
    if inside:
        base.update(
            radius_px=0.35 * size, centre=(rng.uniform(0.2, 0.8) * size, rng.uniform(0.2, 0.8) * size),
            wave_amplitude_px=rng.uniform(0, 4), drift_px=0.0, resin_level=None, substrate_level=None,
            terminations=0, missing=0,
        )  # fmt: skip
    return base


_DRAWS = {"easy": _easy, "moderate": _moderate, "tem": _tem, "sem": _sem, "hard": _hard, "brutal": _brutal}


def make_section(kind: str, seed: int, shape: tuple[int, int] = (512, 512)) -> tuple[np.ndarray, Truth]:
    """Section of a named kind (``KINDS``) and its truth; the same kind, seed and shape give the same picture."""
    recipe = draw_recipe(kind, seed, shape)
    recipe = dataclasses.replace(recipe, bits=None if recipe.bits is None else int(recipe.bits))
    return render_section(recipe, seed, shape, kind=kind)
