"""Decode one picture of a container file in a process of its own: ``python -m ... FILE PAGE FOLDER BYTES``.

Container libraries may hang or ask for any amount of memory on a damaged file, so this process has a memory limit and
the one that started it a deadline. It leaves ``picture.npy`` and ``answer.json`` in FOLDER.
"""

from __future__ import annotations

import json
import math
import sys
from collections.abc import Mapping
from importlib import import_module
from pathlib import Path
from typing import Any

READERS: Mapping[str, str] = {
    ".dm3": "rsciio.digitalmicrograph",
    ".dm4": "rsciio.digitalmicrograph",
    ".ser": "rsciio.tia",
    ".emi": "rsciio.tia",
    ".emd": "rsciio.emd",
    ".hdf5": "rsciio.hspy",
    ".h5": "rsciio.hspy",
    ".hspy": "rsciio.hspy",
}
MAX_OBJECTS = 20_000
MAX_DEPTH = 32
_HDF5 = (".emd", ".hdf5", ".h5", ".hspy")


class RefusedError(Exception):
    """A reason, in plain words, why the file is not decoded."""


def main(arguments: list[str]) -> int:
    """Decode and answer; the answer holds ``error`` where there is no picture."""
    path, page, folder, limit = Path(arguments[0]), int(arguments[1]), Path(arguments[2]), int(arguments[3])
    limit_memory(limit)
    try:
        answer = decode(path, page, folder)
    except RefusedError as refusal:
        answer = {"error": str(refusal)}
    except MemoryError:
        answer = {"error": "it asks for more memory than is allowed"}
    except Exception as error:
        answer = {"error": " ".join(str(error).split())[:200] or type(error).__name__}
    (folder / "answer.json").write_text(json.dumps(answer), encoding="utf-8")
    return 0


def limit_memory(limit: int) -> None:
    """Limit the address space of this process, where the system can."""
    try:
        import resource
    except ImportError:
        return
    _, hard = resource.getrlimit(resource.RLIMIT_AS)
    resource.setrlimit(resource.RLIMIT_AS, (limit if hard == resource.RLIM_INFINITY else min(limit, hard), hard))


def decode(path: Path, page: int, folder: Path) -> dict[str, Any]:
    """Write the picture and describe it."""
    import numpy as np

    suffix = path.suffix.lower()
    if suffix in _HDF5:
        check_hdf5(path)
    signals = import_module(READERS[suffix]).file_reader(str(path))
    pictures = [(signal, index) for signal in signals for index in range(frame_count(signal))]
    if not pictures and suffix == ".emi":
        raise RefusedError("an .emi file only describes pictures; give the .ser file beside it, such as NAME_1.ser")
    if not pictures:
        raise RefusedError("it holds no picture, only other data")
    if not 0 <= page < len(pictures):
        return {"pages": len(pictures)}
    signal, index = pictures[page]
    data = np.asarray(signal["data"])
    data = data.reshape(-1, *data.shape[-2:])[index]
    if data.dtype.names:
        data = np.stack([data[name] for name in data.dtype.names], axis=-1)
    np.save(folder / "picture.npy", data, allow_pickle=False)
    axes = [describe_axis(axis) for axis in signal["axes"][-2:]]
    return {"pages": len(pictures), "axes": axes}


def frame_count(signal: Mapping[str, Any]) -> int:
    """Pictures in one signal: the product of its navigation axes; 0 where it is no stack of pictures."""
    shape = signal["data"].shape
    plane = [axis for axis in signal["axes"] if not axis.get("navigate")]
    if len(shape) < 2 or len(plane) != 2 or any(axis.get("navigate") for axis in signal["axes"][-2:]):
        return 0
    return math.prod(shape[:-2])


def describe_axis(axis: Mapping[str, Any]) -> dict[str, Any]:
    """Scale and unit of one axis as plain values."""
    scale, unit = axis.get("scale"), axis.get("units")
    return {"scale": None if scale is None else float(scale), "unit": unit if isinstance(unit, str) else None}


def check_hdf5(path: Path) -> None:
    """Refuse what an HDF5 file can use to reach other files, or to keep a reader busy."""
    import h5py

    with h5py.File(path, "r") as file:
        waiting: list[tuple[Any, int]] = [(file, 0)]
        seen = 0
        while waiting:
            group, depth = waiting.pop()
            for name in group:
                seen += 1
                if seen > MAX_OBJECTS or depth > MAX_DEPTH:
                    raise RefusedError(f"it holds more than {MAX_OBJECTS} objects or {MAX_DEPTH} levels")
                link = group.get(name, getlink=True)
                if not isinstance(link, h5py.HardLink):
                    raise RefusedError("it links to other objects or files, which are not followed")
                item = group[name]
                if isinstance(item, h5py.Group):
                    waiting.append((item, depth + 1))
                elif isinstance(item, h5py.Dataset) and (item.external or item.is_virtual):
                    raise RefusedError("it takes data from other files, which are not followed")


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
