"""Layers as optics takes them: from a measurement with its traces, or from a table made by hand."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

from layerscan import records
from layerscan.document_files import file_sha256, read_csv, read_number
from layerscan.documents import document_path, read_measurement
from layerscan.errors import InputError

PHASES = ("dark", "middle", "bright", "other")


def layer_table(
    measurement: records.Measurement, *, source: str = "measurement", sha256: str | None = None
) -> records.LayerTable:
    """Layers of a measurement as optics takes them, with the thickness at every station where it was traced."""
    thickness, step = _station_thickness(measurement)
    shared = [
        row.relative
        for row in measurement.budget
        if row.quantity == "period_nm" and row.kind == "B" and row.relative is not None
    ]
    flags = tuple(f for f in measurement.flags if f in ("calibration_uncertainty_unknown", "tilt_uncorrected"))
    return records.LayerTable(
        layers=measurement.layers,
        source=source,
        sha256=sha256,
        u_scale_relative=math.sqrt(sum(r * r for r in shared)) if shared else None,
        station_thickness_nm=thickness,
        station_step_nm=step,
        start_cut_by_frame=measurement.start_cut_by_frame,
        end_cut_by_frame=measurement.end_cut_by_frame,
        flags=flags,
    )


def _station_thickness(measurement: records.Measurement) -> tuple[Any, float | None]:
    """(stations, layers) thickness from the traces, NaN where a boundary was not traced; lateral step in nm."""
    import numpy as np

    boundaries, size = measurement.boundaries, measurement.image.pixel_size
    traced = [b.trace for b in boundaries if b.trace is not None]
    inner = [layer for layer in measurement.layers if layer.complete]
    if size is None or len(traced) != len(boundaries) or len(boundaries) != len(inner) + 1 or len(inner) < 1:
        return None, None
    stations = int(max(t.station.max(initial=0) for t in traced)) + 1
    depth = np.full((stations, len(boundaries)), np.nan)
    row = np.full_like(depth, np.nan)
    column = np.full_like(depth, np.nan)
    for j, trace in enumerate(traced):
        depth[trace.station, j] = trace.depth_nm
        row[trace.station, j] = trace.row_px * size.row_nm
        column[trace.station, j] = trace.column_px * size.column_nm
    thickness = np.full((stations, len(measurement.layers)), np.nan)
    thickness[:, [i for i, layer in enumerate(measurement.layers) if layer.complete]] = np.diff(depth, axis=1)
    steps = np.hypot(np.diff(row, axis=0), np.diff(column, axis=0))
    good = steps[np.isfinite(steps)]
    return thickness, float(np.median(good)) if good.size else None


def read_layer_table(path: Path | str) -> records.LayerTable:
    """Read layers for optics: an ``--out`` folder, its ``measurement.json``, or a table of layers made by hand.

    A table needs a header with ``thickness_nm`` and ``material`` or ``phase``; ``u_nm``, ``sd_lateral_nm`` and
    ``complete`` are read where present. Layers come in the order of the rows. Where every layer states ``u_nm``, the
    largest part of it that all can share counts as common to them (calibration).

    Raises
    ------
    InputError
        The file is missing, has no such columns, no rows, or a cell that is no number; a negative thickness.
    """
    path = Path(path)
    if path.is_dir() or path.suffix.lower() == ".json":
        path = document_path(path, "measurement.json")
        measurement = read_measurement(path)
        if not measurement.layers:
            raise InputError(
                f"'{path}' holds no layers (layered: {str(measurement.layered).lower()}), so nothing can be predicted "
                "from it. Measure an image in which layers were found, or give a table of layers."
            )
        return layer_table(measurement, source=str(path), sha256=file_sha256(path))
    rows = read_csv(path, required=("thickness_nm",))
    if not rows:
        raise InputError(f"'{path}' has a header and no layers. Give one row for each layer.")
    columns = rows[0][1]
    if "material" not in columns and "phase" not in columns:
        raise InputError(f"'{path}' has neither a column 'material' nor 'phase'. Say what each layer is made of.")
    layers = tuple(_read_layer(path, line, row, index) for index, (line, row) in enumerate(rows))
    return records.LayerTable(
        layers=layers, source=str(path), sha256=file_sha256(path), u_scale_relative=_largest_common_u(layers)
    )


def _largest_common_u(layers: tuple[records.Layer, ...]) -> float | None:
    """Relative u that all layers may share, None where a layer states none.

    A table does not say which part of its u is common (calibration); the largest that every layer allows is taken,
    which errs on the side of a wide peak.
    """
    relative = [layer.u_nm / layer.thickness_nm for layer in layers if layer.u_nm is not None and layer.thickness_nm]
    return min(relative) if relative and len(relative) == len(layers) else None


def _read_layer(path: Path, line: int, row: dict[str, str], index: int) -> records.Layer:
    thickness = read_number(row["thickness_nm"], path=path, line=line, column="thickness_nm")
    if thickness is None or thickness < 0:
        raise InputError(
            f"'{path}' line {line}: thickness_nm is '{row['thickness_nm']}'. Give the thickness in nm, 0 or more."
        )
    phase, material = (row.get("phase") or "").strip(), (row.get("material") or "").strip()
    if phase and phase not in PHASES:
        raise InputError(f"'{path}' line {line}: phase is '{phase}'. Give one of {', '.join(PHASES)}, or a material.")
    if not phase and not material:
        raise InputError(f"'{path}' line {line}: neither phase nor material is given. Say what the layer is made of.")
    complete = (row.get("complete") or "true").strip().lower()
    if complete not in ("true", "false", "1", "0", "yes", "no"):
        raise InputError(f"'{path}' line {line}: complete is '{complete}'. Give true or false.")

    def optional(column: str) -> float | None:
        value = read_number(row.get(column, ""), path=path, line=line, column=column)
        if value is not None and value < 0:
            raise InputError(f"'{path}' line {line}: {column} is '{row[column]}'. Give 0 or more, or leave it empty.")
        return value

    return records.Layer(
        index=index,
        phase=phase or "other",  # type: ignore[arg-type]
        thickness_nm=thickness,
        u_nm=optional("u_nm"),
        sd_lateral_nm=optional("sd_lateral_nm"),
        complete=complete in ("true", "1", "yes"),
        material=material or None,
    )
