"""How a test section becomes a picture: geometry, edges, what the microscope adds. Used by ``sections.py``."""

from __future__ import annotations

import io
import math
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy import ndimage
from scipy.special import ndtr

if TYPE_CHECKING:
    from sections import Recipe

_STRIP = 256  # rows drawn at a time, so that large pictures need little memory


def to_layers(recipe: Recipe, centre: tuple[float, float], row: np.ndarray, column: np.ndarray) -> Any:
    """Depth and lateral place of points of the specimen."""
    y, x = row - centre[0], column - centre[1]
    theta = math.radians(recipe.orientation_deg)
    if recipe.radius_px is None:
        return x * math.cos(theta) + y * math.sin(theta), -x * math.sin(theta) + y * math.cos(theta)
    angle = np.arctan2(-x * math.sin(theta) + y * math.cos(theta), x * math.cos(theta) + y * math.sin(theta))
    return np.hypot(x, y) - recipe.radius_px, angle * recipe.radius_px


def to_picture(recipe: Recipe, centre: tuple[float, float], depth: np.ndarray, lateral: np.ndarray) -> Any:
    """Row and column of places given by depth and lateral place."""
    theta = math.radians(recipe.orientation_deg)
    if recipe.radius_px is None:
        row = centre[0] + depth * math.sin(theta) + lateral * math.cos(theta)
        return row, centre[1] + depth * math.cos(theta) - lateral * math.sin(theta)
    angle = lateral / recipe.radius_px + theta
    radius = depth + recipe.radius_px
    return centre[0] + radius * np.sin(angle), centre[1] + radius * np.cos(angle)


def find_centre(recipe: Recipe, shape: tuple[int, int]) -> tuple[float, float]:
    """Reference point of flat layers, or centre of curvature."""
    middle = ((shape[0] - recipe.banner_rows - 1) / 2, (shape[1] - 1) / 2)
    if recipe.radius_px is None:
        return middle
    if recipe.centre is not None:
        return recipe.centre
    theta = math.radians(recipe.orientation_deg)
    return middle[0] - recipe.radius_px * math.sin(theta), middle[1] - recipe.radius_px * math.cos(theta)


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


def draw_structure(
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
        depth, lateral = to_layers(recipe, centre, row[:, None], column[None, :] + shift[:, None])
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


def spoil(
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
        length = math.ceil(np.ptp(across)) + 3
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


def record(recipe: Recipe, rng: np.random.Generator, image: np.ndarray) -> np.ndarray:
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


def through_jpeg(image: np.ndarray, quality: int) -> np.ndarray:
    """The picture after a round through JPEG."""
    from PIL import Image

    buffer = io.BytesIO()
    Image.fromarray(image).save(buffer, format="JPEG", quality=quality)
    return np.asarray(Image.open(buffer))


def add_banner(image: np.ndarray, rows: int, pixel_size_nm: float) -> None:
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
