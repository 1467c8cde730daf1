"""Small drawings for a page of many images: thumbnail with overlay, thickness against layer number.

They are written by hand as SVG, some kilobytes each, because a page holds up to a thousand of them. Colours and
hatching come from the page's style (classes) and its shared patterns.
"""

from __future__ import annotations

import base64
from html import escape
from typing import TYPE_CHECKING

from markupsafe import Markup

from layerscan.figures.style import (
    BLUE,
    GREEN,
    GREY,
    ORANGE,
    PURPLE,
    VERMILION,
    YELLOW,
    length_text,
    nice_length,
    plain_text,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from layerscan.report.summary import ImageRow, LayerPoint, OverlayArea, OverlayLine, Thumbnail

PICTURES = ("image/jpeg", "image/png")
PAGE_BYTES = 24_000_000
"""What all cards of a page may take together; the page itself stays under 30 MB."""

STYLE = f"""
.ov path {{ fill: none; stroke-width: 1.2; vector-effect: non-scaling-stroke; }}
.ov .boundary {{ stroke: {YELLOW}; }}
.ov .doubtful {{ stroke: {VERMILION}; stroke-dasharray: 4 3; }}
.ov .edited {{ stroke: {PURPLE}; stroke-width: 2; }}
.ov .rejected {{ fill: url(#hatch); stroke: #fff; stroke-width: .7; }}
.ov .used {{ fill: none; stroke: #fff; stroke-dasharray: 5 3; stroke-width: .8; }}
.th path {{ fill: none; }}
.th .axis {{ stroke: #1b1b1b; stroke-width: .7; }}
.th .u {{ stroke: {GREY}; stroke-width: 1.6; }}
.th .dark {{ stroke: {BLUE}; }} .th .bright {{ stroke: {ORANGE}; }}
.th .middle {{ stroke: {GREEN}; }} .th .other {{ stroke: {PURPLE}; }}
.th .pt {{ stroke-width: 4; stroke-linecap: round; }}
.th .bright.pt {{ stroke-linecap: square; }}
.th .cut {{ stroke-width: 1.4; }}
.th .unresolved {{ fill: url(#cross); }}
.th text, .ov text {{ font: 9px sans-serif; fill: #1b1b1b; }}
"""

PATTERNS = Markup(
    '<svg width="0" height="0" aria-hidden="true" focusable="false" style="position:absolute"><defs>'
    '<pattern id="hatch" width="6" height="6" patternUnits="userSpaceOnUse" patternTransform="rotate(45)">'
    '<rect width="6" height="6" fill="#fff" fill-opacity=".45"/><path d="M0 0V6" stroke="#000" stroke-width="1.6"/>'
    '</pattern><pattern id="cross" width="4" height="4" patternUnits="userSpaceOnUse">'
    '<path d="M0 0L4 4M4 0L0 4" stroke="#5f5f5f" stroke-width=".8"/></pattern></defs></svg>'
)
"""Hatching shared by every card of a page: put once at its start."""


def points_per_image(images: int) -> int:
    """How many points of traces a card may draw so that the page stays usable."""
    return max(60, min(1500, PAGE_BYTES // max(images, 1) // 40))


def overlay_picture(image: ImageRow, *, most_points: int) -> Markup:
    """The thumbnail with boundaries and what was left out; empty where there is no thumbnail.

    Its text alternative says what is drawn. A picture of another kind than JPEG or PNG is left out.
    """
    thumbnail = image.thumbnail
    if thumbnail is None or thumbnail.media_type not in PICTURES:
        return Markup("")
    width, height = int(thumbnail.width_px), int(thumbnail.height_px)
    data = base64.b64encode(thumbnail.data).decode("ascii")
    parts = [
        f'<svg class="ov" viewBox="0 0 {width} {height}" role="img" aria-label="{_attribute(_overlay_words(image))}">',
        f'<image width="{width}" height="{height}" href="data:{thumbnail.media_type};base64,{data}"/>',
        *[_area(area) for area in image.areas],
        *_lines(image.overlay, most_points),
        _scale_bar(thumbnail),
        "</svg>",
    ]
    return Markup("".join(parts))


def thickness_picture(layers: Sequence[LayerPoint], *, label: str) -> Markup:
    """Thickness against layer number as a small plot: u as bars, unresolved layers hatched, cut-off ones hollow."""
    known = [layer for layer in layers if layer.thickness_nm >= 0]
    if len(known) < 2:
        return Markup("")
    width, height, left, low = 300.0, 120.0, 30.0, 104.0
    first, last = known[0].index, known[-1].index
    top = max(layer.thickness_nm + (layer.u_nm or 0.0) for layer in known) * 1.05 or 1.0
    step = (width - left - 8) / max(last - first, 1)

    def place(layer: LayerPoint) -> tuple[float, float]:
        return left + 4 + (layer.index - first) * step, low - layer.thickness_nm / top * (low - 6)

    scale = (low - 6) / top
    bars, hatched = [], []
    dots: dict[tuple[str, bool], list[str]] = {}
    for layer in known:
        x, y = place(layer)
        if layer.u_nm:
            bars.append(f"M{x:.0f} {y - layer.u_nm * scale:.1f}v{2 * layer.u_nm * scale:.1f}")
        if not layer.resolved:
            half = max((layer.u_nm or 0.0) * scale, 4.0)
            hatched.append(
                f'<rect class="unresolved" x="{x - 3:.0f}" y="{y - half:.1f}" width="6" height="{2 * half:.1f}"/>'
            )
        phase = layer.phase if layer.phase in ("dark", "middle", "bright") else "other"
        shape = f"M{x:.0f} {y:.1f}h0" if layer.complete else f"M{x - 2:.0f} {y - 2:.1f}h4v4h-4z"
        dots.setdefault((phase, layer.complete), []).append(shape)
    marks = [
        f'<path class="{phase} {"pt" if complete else "cut"}" d="{"".join(shapes)}"/>'
        for (phase, complete), shapes in sorted(dots.items())
    ]
    return Markup(
        f'<svg class="th" viewBox="0 0 {width:.0f} {height:.0f}" role="img" aria-label="{_attribute(label)}">'
        f'<path class="axis" d="M{left} 4V{low}H{width}"/><text x="2" y="12">{top:.3g}</text>'
        f'<text x="2" y="{low}">0 nm</text><text x="{left}" y="117">layer {first} to {last}</text>'
        f'{"".join(hatched)}<path class="u" d="{"".join(bars)}"/>{"".join(marks)}</svg>'
    )


def _area(area: OverlayArea) -> str:
    row0, column0, row1, column1 = area.area
    kind = "used" if area.kind == "used" else "rejected"
    return (
        f'<rect class="{kind}" x="{column0:.1f}" y="{row0:.1f}" width="{max(column1 - column0, 0):.1f}" '
        f'height="{max(row1 - row0, 0):.1f}"><title>{_attribute(area.reason)}</title></rect>'
    )


def _lines(lines: Sequence[OverlayLine], most_points: int) -> list[str]:
    total = sum(len(line.points) for line in lines)
    step = max(1, -(-total // most_points))
    paths: dict[str, list[str]] = {}
    for line in lines:
        chosen = [*line.points[:-1:step], line.points[-1]] if line.points else []
        if len(chosen) > 1:
            steps = " ".join(f"{column:.1f} {row:.1f}" for row, column in chosen)
            kind = line.kind if line.kind in ("doubtful", "edited") else "boundary"
            paths.setdefault(kind, []).append(f"M{steps}")
    return [f'<path class="{kind}" d="{"".join(shapes)}"/>' for kind, shapes in sorted(paths.items())]


def _scale_bar(thumbnail: Thumbnail) -> str:
    if not thumbnail.pixel_size_nm:
        return ""
    bar_nm = nice_length(thumbnail.width_px * thumbnail.pixel_size_nm)
    bar = bar_nm / thumbnail.pixel_size_nm
    size = max(thumbnail.width_px / 26, 5.0)  # of the letters
    box = max(bar + size, 4.8 * size)
    middle, low = thumbnail.width_px - box / 2, thumbnail.height_px - 0.7 * size
    return (
        f'<rect x="{middle - box / 2:.1f}" y="{low - 1.8 * size:.1f}" width="{box:.1f}" height="{2.5 * size:.1f}" '
        f'fill="#fff" fill-opacity=".85"/><path style="stroke:#000;stroke-width:3" '
        f'd="M{middle - bar / 2:.1f} {low:.1f}h{bar:.1f}"/><text x="{middle:.1f}" y="{low - 0.5 * size:.1f}" '
        f'style="font-size:{size:.1f}px" text-anchor="middle">{length_text(bar_nm)}</text>'
    )


def _overlay_words(image: ImageRow) -> str:
    kinds = [line.kind for line in image.overlay]
    text = f"{image.path}: {len(kinds)} boundaries"
    if kinds.count("doubtful"):
        text += f", {kinds.count('doubtful')} of them doubtful (dashed)"
    if kinds.count("edited"):
        text += f", {kinds.count('edited')} corrected by hand"
    left_out = [area.reason for area in image.areas if area.kind == "rejected"]
    return text + (f"; left out, hatched: {', '.join(left_out)}" if left_out else "")


def _attribute(text: str) -> str:
    return escape(plain_text(text), quote=True)
