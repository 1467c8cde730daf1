"""The look of every figure in one place, and the way from a figure to the same SVG bytes each time.

Colours are those of Okabe and Ito (2008), which stay apart for colour-blind readers; every colour comes with its own
dash or marker, so that nothing rests on colour alone. Figures are drawn without pyplot: no window, no global figure.
"""

from __future__ import annotations

import base64
import hashlib
import io
import re
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from html import escape
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from layerscan.records import Colour, FloatArray, Phase

BLACK = "#000000"
GREY = "#5f5f5f"
ORANGE = "#E69F00"
SKY = "#56B4E9"
GREEN = "#009E73"
YELLOW = "#F0E442"
BLUE = "#0072B2"
VERMILION = "#D55E00"
PURPLE = "#CC79A7"
DARK_VERMILION = "#8a3c00"  # vermilion dark enough for small words on white
"""Okabe and Ito, Color universal design (2008), https://jfly.uni-koeln.de/color/ (values from memory)."""

PREDICTED, OBSERVED, SWAPPED = BLUE, VERMILION, GREY
PHASE_LOOK: dict[Phase, tuple[str, str, str]] = {
    "dark": (BLUE, "o", "-"),
    "middle": (GREEN, "^", "-."),
    "bright": (ORANGE, "s", "--"),
    "other": (PURPLE, "D", ":"),
}
"""Colour, marker and dash of each phase."""
HATCH_LEFT_OUT, HATCH_UNRESOLVED = "////", "xxxx"

_RC: dict[str, Any] = {
    "svg.fonttype": "none",
    "svg.hashsalt": "layerscan",
    "text.parse_math": False,  # a file name may hold a dollar sign
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans", "Verdana", "Arial"],
    "font.size": 9.0,
    "axes.titlesize": 10.0,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.labelsize": 9.0,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.linewidth": 0.8,
    "legend.fontsize": 8.0,
    "legend.frameon": False,
    "xtick.labelsize": 8.0,
    "ytick.labelsize": 8.0,
    "hatch.linewidth": 0.6,
    "figure.dpi": 72.0,
    "savefig.facecolor": "white",
    "axes.formatter.useoffset": False,
    "path.simplify": True,
    "path.simplify_threshold": 0.2,
}
_HUES = (
    (22, "pink-red"),
    (45, "red"),
    (70, "orange"),
    (105, "yellow"),
    (130, "yellow-green"),
    (170, "green"),
    (210, "blue-green"),
    (245, "cyan-blue"),
    (290, "blue"),
    (320, "violet"),
    (345, "purple"),
    (361, "pink-red"),
)  # CIELAB hue angle below which each name holds; everyday words, common practice, no source
_IMAGE = re.compile(r'xlink:href="data:image/png;base64,\s*([^"]+)"')
_IDENTIFIER = re.compile(r'(\bid="|xlink:href="#|url\(#)')
_PATH, _DECIMALS = re.compile(r'\bd="[^"]*"'), re.compile(r"(\.\d{2})\d+")  # a hundredth of a point is enough
_NOT_XML = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\ud800-\udfff\ufffe\uffff]")
_IMAGE_BYTES = 200_000


@dataclass(frozen=True, kw_only=True)
class Drawing:
    """What a figure shows, before it is known whether it becomes SVG, PDF or TIFF.

    ``compose`` fills an empty figure in the house style; ``description`` says the same in words.
    """

    width_in: float
    height_in: float
    title: str
    description: str
    compose: Callable[[Figure], None]


@contextmanager
def composed(drawing: Drawing) -> Iterator[Figure]:
    """The drawing as a matplotlib figure; save it inside the ``with`` block, where the house style holds."""
    import matplotlib as mpl
    from matplotlib.figure import Figure

    with mpl.rc_context(_RC):  # type: ignore[arg-type]
        figure = Figure(figsize=(drawing.width_in, drawing.height_in), layout="constrained")
        drawing.compose(figure)
        yield figure


def render_svg(drawing: Drawing) -> str:
    """The drawing as SVG text with a title and a description for those who cannot see it.

    The same drawing gives the same bytes: no date, a fixed salt, names of parts that begin with a hash of the title and
    description (so that several figures can stand in one page). Images inside become JPEG, which holds micrographs
    in a quarter of the bytes.

    Returns
    -------
    str
        One ``<svg>`` element without XML declaration, ready to stand in a page or in a file of its own.
    """
    from matplotlib.backends.backend_svg import FigureCanvasSVG

    title, description = plain_text(drawing.title), plain_text(drawing.description)
    prefix = "f" + hashlib.sha256(f"{title}\n{description}".encode()).hexdigest()[:8]
    buffer = io.StringIO()
    with composed(drawing) as figure:
        nothing = dict.fromkeys(("Date", "Creator", "Format", "Type"))
        FigureCanvasSVG(figure).print_svg(buffer, metadata=nothing)  # type: ignore[no-untyped-call]
    svg = buffer.getvalue()
    svg = svg[svg.index("<svg") :]
    svg = _IMAGE.sub(_as_jpeg, svg)
    svg = _PATH.sub(lambda path: _DECIMALS.sub(r"\1", path.group(0)), svg)
    svg = prefix_names(svg, prefix)
    head_end = svg.index(">") + 1
    head = svg[: head_end - 1] + f' role="img" aria-labelledby="{prefix}-title {prefix}-desc">'
    names = f'<title id="{prefix}-title">{escape(title)}</title><desc id="{prefix}-desc">{escape(description)}</desc>'
    return head + names + svg[head_end:]


def prefix_names(svg: str, prefix: str) -> str:
    """The SVG with ``prefix`` before every id and every reference to one: two copies can then stand in one page."""
    return _IDENTIFIER.sub(lambda match: f"{match.group(1)}{prefix}-", svg)


def as_sentences(parts: Sequence[str]) -> str:
    """The parts as sentences: a capital first, a stop after each."""
    return " ".join(f"{part[0].upper()}{part[1:]}." for part in parts if part)


def plain_text(text: str) -> str:
    """The text without the characters that XML does not allow."""
    return _NOT_XML.sub("�", text)


def _as_jpeg(match: re.Match[str]) -> str:
    """The micrograph as JPEG; a picture in colour stays what it is."""
    from PIL import Image, ImageChops

    image = Image.open(io.BytesIO(base64.b64decode(match.group(1)))).convert("RGB")
    red, green, blue = image.split()
    if ImageChops.difference(red, green).getbbox() or ImageChops.difference(green, blue).getbbox():
        return match.group(0)
    image = red
    return f'xlink:href="{jpeg_data_uri(image, limit_bytes=_IMAGE_BYTES)}"'


def jpeg_data_uri(image: Any, *, limit_bytes: int, quality: int = 85) -> str:
    """A ``data:`` address of the Pillow image as JPEG, coarser until it keeps within ``limit_bytes``."""
    while True:
        buffer = io.BytesIO()
        image.save(buffer, format="JPEG", quality=quality, optimize=True)
        if buffer.tell() <= limit_bytes or quality <= 25:
            return "data:image/jpeg;base64," + base64.b64encode(buffer.getvalue()).decode("ascii")
        quality -= 10


def grey_picture(intensity: FloatArray, *, longest_px: int) -> tuple[FloatArray, int]:
    """The image reduced by whole blocks to at most ``longest_px`` along its longer side, as 0 to 1.

    Grey is stretched between the 0.5 and 99.5 percentiles; pixels without a value become white.

    Returns
    -------
    (rows, columns) float array and the size of a block in pixels. Rows and columns that do not fill a block are left
    out at the lower and right edge.
    """
    import numpy as np

    block = max(1, -(-max(intensity.shape) // longest_px))
    rows, columns = (max(1, size // block) for size in intensity.shape)
    tall, wide = min(block, intensity.shape[0]), min(block, intensity.shape[1])
    small = np.full((rows, columns), np.nan)
    for row in range(rows):  # strip by strip: a large image is never copied whole
        strip = np.asarray(intensity[row * tall : (row + 1) * tall, : columns * wide], dtype=np.float64)
        boxes = strip.reshape(strip.shape[0], columns, wide)
        finite = np.isfinite(boxes)
        count = finite.sum(axis=(0, 2))
        total = np.where(finite, boxes, 0.0).sum(axis=(0, 2))
        np.divide(total, count, out=small[row], where=count > 0)
    known = small[np.isfinite(small)]
    if known.size == 0:
        return np.ones_like(small), block
    low, high = np.percentile(known, [0.5, 99.5])
    if high <= low:
        return np.where(np.isfinite(small), 0.5, 1.0), block
    stretched = np.clip((small - low) / (high - low), 0.0, 1.0)
    return np.where(np.isfinite(stretched), stretched, 1.0), block


def nice_length(span_nm: float) -> float:
    """A round length of 1, 2 or 5 times a power of ten, about a fifth of ``span_nm``."""
    import math

    target = span_nm / 5
    power = 10.0 ** math.floor(math.log10(target))
    return max(step * power for step in (1, 2, 5) if step * power <= target * 1.0000001)


def length_text(length_nm: float) -> str:
    """A length in words: nm below 1000, else um.

    Examples
    --------
    >>> length_text(500), length_text(2000)
    ('500 nm', '2 µm')
    """
    return f"{length_nm:g} nm" if length_nm < 1000 else f"{length_nm / 1000:g} µm"


def draw_swatches(axes: Axes, swatches: Sequence[tuple[str, Colour, str]]) -> None:
    """Fill an empty axes with a column of colour patches.

    Parameters
    ----------
    axes : Axes
        Its own ticks and frame are removed.
    swatches : sequence of (name, colour, line style)
        The patch of each colour is framed in the line style of its curve.
    """
    from matplotlib.patches import Rectangle

    axes.set_axis_off()
    axes.set(xlim=(0, 1), ylim=(0, max(len(swatches), 2)))
    for place, (name, colour, dash) in enumerate(swatches):
        top = max(len(swatches), 2) - place
        axes.add_patch(Rectangle((0.0, top - 0.5), 1.0, 0.42, facecolor=colour.srgb, edgecolor=BLACK, linestyle=dash))
        axes.text(0.0, top - 0.54, f"{name}\n{colour_text(colour)}", va="top", fontsize=7.5, linespacing=1.25)


def colour_text(colour: Colour) -> str:
    """L*, a*, b* and what to know about the swatch, in two short lines."""
    light, a, b = (round(value) for value in colour.lab)
    first = f"L* {light}, a* {a}, b* {b}"
    if not colour.in_gamut:
        return f"{first}\nnearest in sRGB: {colour.srgb}"
    return f"{first}\nsRGB {colour.srgb}"


def colour_words(colour: Colour) -> str:
    """A text alternative of a swatch: what hue it is, how light and how strong, in words a listener can use."""
    import math

    light, a, b = colour.lab
    chroma, hue = math.hypot(a, b), math.degrees(math.atan2(b, a)) % 360
    depth = "dark " if light < 30 else "light " if light > 75 else ""
    if chroma < 8:
        return "black" if light < 15 else "white" if light > 92 else f"{depth}grey"
    strength = "greyish " if chroma < 25 else ""
    return depth + strength + next(name for limit, name in _HUES if hue < limit)


def number_text(value: float, u: float | None = None) -> str:
    """A number with its standard uncertainty, rounded to two digits of u (JCGM 100:2008, 7.2.6).

    Examples
    --------
    >>> number_text(151.237, 0.84), number_text(151.237), number_text(151.237, 12.3)
    ('151.24 ± 0.84', '151.2', '151 ± 12')
    """
    import math

    if not math.isfinite(value):
        return "not known"
    if not u or not math.isfinite(u):
        return f"{value:.4g}" if abs(value) < 1000 else f"{value:.0f}"
    decimals = max(0, 1 - math.floor(math.log10(u)))
    if decimals == 0 and u >= 1e4:
        return f"{value:.0f} ± {u:.2g}"
    return f"{value:.{decimals}f} ± {u:.{decimals}f}"
