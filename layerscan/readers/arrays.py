"""NumPy ``.npy`` files: an array of one or more pages; pickled objects are refused."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from layerscan.errors import InputError
from layerscan.readers.source import ImagePlan, check_page, check_size, check_type, plain_errors

if TYPE_CHECKING:
    from numpy.typing import NDArray


def plan_npy(path: Path, page: int) -> ImagePlan:
    """Read the header of an ``.npy`` file of shape (rows, columns) or (pages, rows, columns).

    Raises
    ------
    InputError
        Other dimensions, no numbers, cut short.
    """
    with plain_errors(path, "NPY"):
        array = _map(path)
        check_type(path, array.dtype)
        if array.ndim not in (2, 3):
            raise InputError(
                f"'{path.name}' has {array.ndim} dimensions. Give (rows, columns) or (pages, rows, columns)."
            )
        count = 1 if array.ndim == 2 else int(array.shape[0])
        check_page(path, page, count)
        shape = (int(array.shape[-2]), int(array.shape[-1]))
        check_size(path, shape, bytes_per_pixel=array.dtype.itemsize, stored_bytes=path.stat().st_size)
        return ImagePlan(
            shape=shape,
            stored_type=str(array.dtype),
            page_count=count,
            file_format="NPY",
            decode=lambda: _decode(path, page),
        )


def _map(path: Path) -> NDArray[Any]:
    array: NDArray[Any] = np.load(path, mmap_mode="r", allow_pickle=False)
    return array


def _decode(path: Path, page: int) -> NDArray[Any]:
    with plain_errors(path, "NPY"):
        array = _map(path)
        return np.array(array if array.ndim == 2 else array[page])
