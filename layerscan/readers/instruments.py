"""Container files of instruments through RosettaSciIO (optional), decoded in a process with a deadline and a limit."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import tempfile
from importlib.util import find_spec
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from layerscan.errors import InputError, MissingExtraError
from layerscan.readers.calibration import ScaleStatement, length_nm
from layerscan.readers.source import MAX_PIXELS, ImagePlan, check_page, check_type, plain_errors, positive, to_grey

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

DEADLINE_S = 120.0
MEMORY_BYTES = 4 << 30
"""Address space of the decoding process, beside ten times the size of the file."""

_DIFFRACTION = ("1/nm", "nm^-1", "1/a", "mrad", "rad", "ev")


def plan_instrument(path: Path, page: int) -> ImagePlan:
    """Decode one picture of a container; a page counts the pictures of all its series in order.

    Raises
    ------
    MissingExtraError
        RosettaSciIO is not installed.
    InputError
        Damaged, too slow or too large to decode, or it holds no picture.

    Notes
    -----
    A container cannot be planned without decoding it, so the picture is kept in memory.
    """
    if find_spec("rsciio") is None:
        raise MissingExtraError(
            f"Reading '{path.name}' needs RosettaSciIO (GPL), which is not installed: "
            'pip install "layerscan[instruments]".'
        )
    with tempfile.TemporaryDirectory(prefix="layerscan-") as folder:
        answer = _run_worker(path, page, Path(folder))
        check_page(path, page, int(answer["pages"]))
        with plain_errors(path, path.suffix.lower()):
            stored: NDArray[Any] = np.load(Path(folder) / "picture.npy", allow_pickle=False)
    check_type(path, stored.dtype)
    if stored.ndim not in (2, 3) or 0 in stored.shape or stored.shape[0] * stored.shape[1] > MAX_PIXELS:
        raise InputError(f"'{path.name}' holds data of shape {stored.shape}, no picture that can be read.")
    pixels = to_grey(stored)
    scales, no_scale = _read_axes(answer["axes"])
    return ImagePlan(
        shape=(int(pixels.shape[0]), int(pixels.shape[1])),
        stored_type=str(stored.dtype),
        page_count=int(answer["pages"]),
        file_format=path.suffix[1:].upper(),
        decode=lambda: pixels,
        scales=tuple(scales),
        no_scale=tuple(no_scale),
    )


def _run_worker(path: Path, page: int, folder: Path) -> dict[str, Any]:
    limit = MEMORY_BYTES + 10 * path.stat().st_size
    command = [
        sys.executable,
        "-P",
        "-m",
        "layerscan.readers.container_worker",
        str(path.resolve()),
        str(page),
        str(folder),
    ]
    try:
        subprocess.run(
            [*command, str(limit)],
            timeout=DEADLINE_S,
            check=False,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            env={**os.environ, "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"},
        )
    except subprocess.TimeoutExpired:
        raise InputError(
            f"'{path.name}' was not decoded within {DEADLINE_S:.0f} s; it may be damaged. Export it as TIFF instead."
        ) from None
    answer_file = folder / "answer.json"
    answer: dict[str, Any] = (
        json.loads(answer_file.read_text(encoding="utf-8"))
        if answer_file.is_file()
        else {"error": "decoding it ended without an answer"}
    )
    if "error" in answer:
        raise InputError(
            f"'{path.name}' cannot be read; it may be damaged ({answer['error']}). Export it again, or as TIFF."
        )
    return answer


def _read_axes(axes: Sequence[dict[str, Any]]) -> tuple[list[ScaleStatement], list[str]]:
    scales = [positive(axis["scale"]) for axis in axes]
    units = [axis["unit"] for axis in axes]
    lengths = [length_nm(unit) if unit else None for unit in units]
    if scales[0] and scales[1] and lengths[0] and lengths[1]:
        row_nm, column_nm = scales[0] * lengths[0], scales[1] * lengths[1]
        return [ScaleStatement(row_nm=row_nm, column_nm=column_nm, source="axis scales in the file")], []
    if any(unit and unit.lower() in _DIFFRACTION for unit in units):
        return [], [f"its axes are in {units[0]}: it is no picture of lengths"]
    if all(unit is None for unit in units) and scales != [1.0, 1.0]:
        return [], [
            f"its axis scale ({axes[0]['scale']:g} x {axes[1]['scale']:g}) has no unit, which is no calibration"
        ]
    return [], []
