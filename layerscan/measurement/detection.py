"""Whether a picture shows a layered structure at all, where, and whether it repeats."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np

from layerscan.errors import InputError
from layerscan.measurement.candidates import Candidate, StraightCandidate, fundamental_period, straighten_candidate
from layerscan.measurement.evidence import (
    CLEAR_LINE,
    LEAST_CONTRAST,
    LOCKED,
    PURE,
    STEADY,
    Evidence,
    alignment_statistic,
    is_hum,
    judge_candidate,
    layer_statistic,
    measure_purity,
    p_value_of,
)
from layerscan.measurement.layered_area import global_direction, map_layers, mean_direction, pooled_spacing
from layerscan.measurement.orientation import Tiles, analyse_tiles
from layerscan.measurement.pyramid import Level, build_pyramid

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from layerscan.records import BoolArray, FloatArray, Progress, Region


@dataclass(frozen=True, kw_only=True, eq=False)
class LayerDetection:
    """Answer of ``detect_layers``. Angles are in pixel space, places in pixels of the array given.

    ``valid`` is a coarse map of the layered area: cell (i, j) covers the square of ``valid_step_px`` pixels that starts
    at ``(i, j) * valid_step_px``. ``orientation_map_deg`` holds the local direction of the normal at ``map_row_px`` x
    ``map_column_px``, ``coherence`` (0 to 1) how sure it is. ``period_px`` is that of the tiles' spectra, good to start
    from (a few per cent); boundaries measure it. ``aligned`` without ``layered``: no layers, but the
    pattern has a direction and a spacing, which are given.
    """

    layered: bool
    periodic: bool
    statistic: float | None
    p_value: float | None
    region: Region | None
    valid: BoolArray | None = None
    valid_step_px: int = 1
    orientation_deg: float | None = None
    u_orientation_deg: float | None = None
    orientation_map_deg: FloatArray | None = None
    coherence: FloatArray | None = None
    map_row_px: FloatArray | None = None
    map_column_px: FloatArray | None = None
    period_px: float | None = None
    u_period_px: float | None = None
    seed_px: tuple[float, float] | None = None
    aligned: bool = False
    flags: tuple[str, ...] = ()
    evidence: Evidence = field(default_factory=Evidence)
    reason: str = ""

    def valid_mask(self, shape: tuple[int, int]) -> BoolArray:
        """The layered area as a mask of the full picture, (rows, columns)."""
        out = np.zeros(shape, dtype=bool)
        if self.valid is not None:
            i = np.minimum(np.arange(shape[0]) // self.valid_step_px, self.valid.shape[0] - 1)
            j = np.minimum(np.arange(shape[1]) // self.valid_step_px, self.valid.shape[1] - 1)
            out = self.valid[np.ix_(i, j)]
        return out


@dataclass(frozen=True, kw_only=True, eq=False)
class _Judged:
    """A candidate with its evidence."""

    statistic: float
    candidate: Candidate
    straight: StraightCandidate
    evidence: Evidence


def detect_layers(
    intensity: NDArray[np.floating], *, mask: BoolArray | None = None, progress: Progress | None = None
) -> LayerDetection:
    """Decide whether a picture shows a layered structure, where, and whether it repeats.

    Parameters
    ----------
    intensity : (rows, columns) float array
        NaN where nothing was recorded.
    mask : (rows, columns) bool array, optional
        True where a pixel may be used (banner and holes False).
    progress : callable, optional
        ``progress(what, fraction)``.

    Returns
    -------
    LayerDetection

    Raises
    ------
    InputError
        The array is not two-dimensional.

    Notes
    -----
    Tiles on a pyramid give candidates; each is straightened along its own layers and judged on the mean profile: a
    line that stands above both neighbouring octaves (red backgrounds and curtains have no deficit below it), that
    is the same far away along the layers (fibres end), that explains most of what varies at that scale (lattices,
    foams and cells vary in other directions too), with several alternations of similar height (an edge with Fresnel
    fringes has few). The p-value is read from the statistic's distribution in simulated pictures without layers,
    not from an exponential law, which is wrong on a red background.
    """
    image = np.asarray(intensity)
    if image.ndim != 2:
        raise InputError(f"The picture has {image.ndim} dimensions ({image.shape}); detection needs rows and columns.")
    finite = np.isfinite(image) if mask is None else np.isfinite(image) & mask
    if min(image.shape) < 16 or finite.sum() < 256:
        return _nothing("too small")
    usable = image[finite]
    if not float(usable.max()) > float(usable.min()):
        return _nothing("constant")
    levels = build_pyramid(image, mask=mask)
    tiles = _tiles_of_levels(levels, progress)
    candidates = _candidates(levels, tiles)
    judged: list[_Judged] = []
    for candidate in candidates:
        straight = straighten_candidate(candidate)
        if straight is None:
            continue
        longer = fundamental_period(straight)
        if longer is not None:
            candidate = replace(candidate, frequency=1 / longer)
            straight = straighten_candidate(candidate) or straight
        evidence = judge_candidate(candidate, straight, levels, tiles)
        judged.append(
            _Judged(statistic=layer_statistic(evidence), candidate=candidate, straight=straight, evidence=evidence)
        )
        if judged[-1].statistic > 1:
            break
    if progress is not None:
        progress("layers looked for", 1.0)
    if not judged:
        return _nothing("no line")
    best = max(judged, key=lambda one: one.statistic)
    if best.statistic > 1:
        return _layered(best, levels)
    return _not_layered(best, judged)


def _nothing(reason: str) -> LayerDetection:
    return LayerDetection(
        layered=False,
        periodic=False,
        statistic=None,
        p_value=None,
        region=None,
        flags=("no_layers_found",),
        reason=reason,
    )


def _tiles_of_levels(levels: tuple[Level, ...], progress: Progress | None) -> tuple[Tiles, ...]:
    out = []
    for index, level in enumerate(levels):
        if progress is not None:
            progress("looking for layers", 0.5 * index / len(levels))
        hop = 32 if level.intensity.size < 2**22 else 64
        out.append(analyse_tiles(level, hop=hop, lowest=3.2 if index < len(levels) - 1 else 2.4))
    return tuple(out)


def _candidates(levels: tuple[Level, ...], all_tiles: tuple[Tiles, ...]) -> list[Candidate]:
    from scipy.ndimage import label

    found: list[Candidate] = []
    for level, tiles in zip(levels, all_tiles, strict=True):
        strong = tiles.contrast > LEAST_CONTRAST
        groups, count = label(strong, structure=np.ones((3, 3)))
        for number in range(1, count + 1):
            member = groups == number
            if member.sum() < min(3, member.size):
                continue
            weight = np.log(tiles.contrast[member])
            order = np.argsort(tiles.frequency[member])
            total = np.cumsum(weight[order])
            frequency = float(tiles.frequency[member][order][np.searchsorted(total, total[-1] / 2)])
            area = float(member.mean() * level.intensity.size * level.factor**2)
            suits = math.exp(-0.5 * abs(math.log(frequency / 0.12)))
            score = area * float(np.median(weight) * np.median(tiles.amplitude[member])) * suits
            found.append(
                Candidate(level=level, tiles=tiles, member=member, frequency=frequency, area=area, score=score)
            )
    found.sort(key=lambda c: -c.score)
    return found[:4]


def _not_layered(best: _Judged, judged: list[_Judged]) -> LayerDetection:
    """No layers that can be told apart; where the pattern is aligned all the same, its direction and spacing."""
    aligned = [one for one in judged if alignment_statistic(one.evidence) > 1]
    if not aligned:
        return LayerDetection(
            layered=False, periodic=False, statistic=best.statistic, p_value=p_value_of(best.statistic), region=None,
            flags=("no_layers_found",), evidence=best.evidence, reason="weak",
        )  # fmt: skip
    one = aligned[0]
    factor = one.candidate.level.factor
    orientation, spread, count = mean_direction(one.candidate)
    spacing, u_spacing = pooled_spacing(one.straight)
    return LayerDetection(
        layered=False,
        periodic=False,
        statistic=best.statistic,
        p_value=p_value_of(best.statistic),
        region=None,
        aligned=True,
        orientation_deg=orientation,
        u_orientation_deg=spread / math.sqrt(count),
        period_px=spacing * factor,
        u_period_px=u_spacing * factor,
        flags=("irregular",),
        evidence=one.evidence,
        reason="aligned, but not layered",
    )


def _layered(best: _Judged, levels: tuple[Level, ...]) -> LayerDetection:
    statistic, candidate, straight, evidence = best.statistic, best.candidate, best.straight, best.evidence
    shape = levels[0].intensity.shape
    level, tiles, member = candidate.level, candidate.tiles, candidate.member
    step, valid = map_layers(candidate, straight, shape)
    rows, columns = np.nonzero(valid)
    region = (
        int(rows.min() * step), int(columns.min() * step),
        int(min((rows.max() + 1) * step, shape[0])), int(min((columns.max() + 1) * step, shape[1])),
    )  # fmt: skip
    field_map = straight.field_map
    angle = np.degrees(0.5 * np.arctan2(field_map.sin2, field_map.cos2)) % 180
    direction = global_direction(candidate, levels, step, valid)
    harmonics, wander = measure_purity(candidate, straight, levels)
    period = level.factor / candidate.frequency
    # hum fills the frame and keeps its beat; where it stands out clearly it is the same all along the rows
    bent = evidence.alone > CLEAR_LINE and evidence.persistence < LOCKED
    steady = valid.mean() > 0.7 and wander < 2 * STEADY and not bent
    if steady and is_hum(direction.angle_deg, harmonics, period, levels):
        return LayerDetection(
            layered=False, periodic=False, statistic=statistic, p_value=p_value_of(statistic), region=None,
            flags=("no_layers_found", "scan_lines"), evidence=evidence, reason="one sinusoid locked to the scan lines",
        )  # fmt: skip
    flags = ["orientation_varies"] if direction.varies else []
    if harmonics < PURE and wander < STEADY:
        flags.append("confirm_with_second_section")
    if direction.flat:
        angle = np.full_like(angle, direction.angle_deg)
    seed = straight.grid.origin
    return LayerDetection(
        layered=True,
        periodic=evidence.spacing_cv < 0.25,
        statistic=statistic,
        p_value=p_value_of(statistic),
        region=region,
        valid=valid,
        valid_step_px=step,
        orientation_deg=direction.angle_deg,
        u_orientation_deg=direction.u_deg,
        orientation_map_deg=angle,
        coherence=np.where(member, tiles.coherence, 0.0),
        map_row_px=level.to_page(tiles.row),
        map_column_px=level.to_page(tiles.column),
        period_px=period,
        u_period_px=period * math.hypot(0.03, evidence.spacing_cv / math.sqrt(evidence.swings)),
        seed_px=(
            float(level.to_page(straight.grid.row[seed])), float(level.to_page(straight.grid.column[seed])),
        ),
        flags=tuple(flags),
        evidence=evidence,
    )  # fmt: skip
