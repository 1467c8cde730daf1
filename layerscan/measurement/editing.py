"""Corrections by hand: boundaries moved, deleted or added, and what that makes of the layers between them."""

from __future__ import annotations

import dataclasses
import itertools
from typing import TYPE_CHECKING

import numpy as np

from layerscan.errors import MeasurementError
from layerscan.measurement.result import section_geometry
from layerscan.settings import parse_edit

if TYPE_CHECKING:
    from layerscan.measurement.result import FoundLayers
    from layerscan.records import FloatArray, Phase
    from layerscan.settings import MeasureSettings


def apply_edits(found: FoundLayers, settings: MeasureSettings, *, unit_nm: float) -> FoundLayers:
    """Apply ``settings.edits`` to found layers.

    Parameters
    ----------
    found : FoundLayers
        The result without edits; indices and depths of the edits refer to it.
    settings : MeasureSettings
        Its ``edits``; lengths are those of the document, in nm of the specimen, so the section geometry is taken back.
    unit_nm : float
        Side of a square pixel [nm].

    Returns
    -------
    FoundLayers
        Flagged ``edited_by_hand``; a moved or added boundary keeps the shape of its own or nearest trace. Its place is
        the user's word: the uncertainty of the fit is kept for a moved boundary and taken from its neighbours for an
        added one.

    Raises
    ------
    MeasurementError
        An index that does not exist, a boundary moved past its neighbour or added on top of another, or fewer than two
        boundaries left.

    Notes
    -----
    Deleting one boundary joins two layers of different phase: the joined layer takes the phase of the thicker one, and
    phases beyond are left as they are, so two neighbours may then be of one phase.
    """
    scale = unit_nm * section_geometry(settings, found.orientation_rad).factor
    count = len(found.depth)
    shift = np.zeros(count)
    keep = np.ones(count, bool)
    edited = np.zeros(count, bool)
    added: list[float] = []
    for text in settings.edits:
        verb, index, length = parse_edit(text)
        if index is not None and not 0 <= index < count:
            raise MeasurementError(f"Edit '{text}': there is no boundary {index}; there are 0 to {count - 1}.")
        if verb == "delete":
            assert index is not None
            keep[index] = False
        elif verb == "move":
            assert index is not None
            assert length is not None
            shift[index] += length / scale
            edited[index] = True
        else:
            assert length is not None
            added.append(length / scale)
    return _rebuild(found, shift, keep, edited, added)


def _rebuild(
    found: FoundLayers, shift: FloatArray, keep: np.ndarray, edited: np.ndarray, added: list[float]
) -> FoundLayers:
    """New boundaries in depth order: (depth, source index, offset, added, edited) of each."""
    entries = [
        (float(found.depth[b] + shift[b]), b, float(shift[b]), False, bool(edited[b]))
        for b in range(len(found.depth))
        if keep[b]
    ]
    order = [entry[1] for entry in sorted(entries)]
    if order != sorted(order):
        raise MeasurementError(
            "An edit moves a boundary past its neighbour. Move it less, or delete one and add another."
        )
    for depth in added:
        near = int(np.argmin(np.abs(found.depth - depth)))
        entries.append((depth, near, depth - float(found.depth[near]), True, True))
    entries.sort()
    if len(entries) < 2:
        raise MeasurementError("Fewer than two boundaries are left after the edits, so no layer is left.")
    places: FloatArray = np.array([entry[0] for entry in entries])
    if np.any(np.diff(places) < 1e-6):
        raise MeasurementError("An edit puts two boundaries at the same place. Delete one of them.")
    source = np.array([entry[1] for entry in entries])
    offset = np.array([entry[2] for entry in entries])
    is_new = np.array([entry[3] for entry in entries])
    covariance = found.covariance[np.ix_(source, source)].copy()
    for i in np.flatnonzero(is_new):  # on its own: not tied to the boundary whose trace it borrows
        covariance[i, :] = covariance[:, i] = 0.0
        covariance[i, i] = found.covariance[source[i], source[i]]
    toward_row, toward_column = _normal_step(found)
    origin = float(places[0])
    return dataclasses.replace(
        found,
        depth=places - origin,
        covariance=covariance,
        phase=_phases(found, places),
        ends=(max(found.ends[0] + origin, 0.0), max(found.ends[1] + float(found.depth[-1] - places[-1]), 0.0)),
        profile_depth=found.profile_depth - origin,
        station_depth=found.station_depth[source] + offset[:, None] - origin,
        u_station=found.u_station[source],
        row=found.row[source] + offset[:, None] * toward_row,
        column=found.column[source] + offset[:, None] * toward_column,
        roughness=np.where(is_new, np.nan, found.roughness[source]),
        correlation_length=np.where(is_new, np.nan, found.correlation_length[source]),
        lateral_noise=found.lateral_noise[source],
        terminations=np.where(is_new, 0, found.terminations[source]) if len(found.terminations) else found.terminations,
        edited=np.array([entry[4] for entry in entries]),
        flags=(*found.flags, "edited_by_hand"),
    )


def _normal_step(found: FoundLayers) -> tuple[float, float]:
    """Change of page row and column for one pixel of depth, from the traces themselves."""
    span = found.station_depth[-1] - found.station_depth[0]
    good = np.isfinite(span) & (np.abs(span) > 1e-9)
    if not good.any():
        return float(np.sin(found.orientation_rad)), float(np.cos(found.orientation_rad))
    rows = (found.row[-1] - found.row[0])[good] / span[good]
    columns = (found.column[-1] - found.column[0])[good] / span[good]
    return float(np.median(rows)), float(np.median(columns))


def _phases(found: FoundLayers, depth: FloatArray) -> tuple[Phase, ...]:
    """Phase of every segment between the new boundaries: the old phase that fills most of it; splits alternate."""
    limits = np.concatenate([[-np.inf], found.depth, [np.inf]])
    new = np.concatenate([[found.depth[0] - found.ends[0] - 1], depth, [found.depth[-1] + found.ends[1] + 1]])
    out: list[Phase] = []
    for low, high in itertools.pairwise(new):
        overlap = np.minimum(limits[1:], high) - np.maximum(limits[:-1], low)
        out.append(found.phase[int(np.argmax(overlap))])
    opposite: dict[Phase, Phase] = {"dark": "bright", "bright": "dark"}
    for i in range(1, len(out) - 1):
        if out[i] == out[i - 1] and out[i] in opposite:
            joined = len(depth) < len(found.depth)
            if not joined:
                out[i] = opposite[out[i]]
    return tuple(out)
