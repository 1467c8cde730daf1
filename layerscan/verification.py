"""Two documents beside each other: which fields changed."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

TOLERANCE = 1e-9
"""Relative difference below which two numbers count as equal: other processors round differently."""


def find_changes(saved: Any, now: Any, *, field: str = "", most: int = 200) -> tuple[tuple[str, Any, Any], ...]:
    """List the fields in which two documents differ.

    Parameters
    ----------
    saved, now : dict, list or plain JSON value
        The document as saved and as it came out now.
    field : str
        Path of the field, such as ``layers[3].thickness_nm``.
    most : int
        No more changes than this are listed.

    Returns
    -------
    tuple of (field, saved, now)
        Empty where the documents are equal.
    """
    changes: list[tuple[str, Any, Any]] = []
    _collect(saved, now, field, changes, most)
    return tuple(changes[:most])


def _collect(saved: Any, now: Any, field: str, changes: list[tuple[str, Any, Any]], most: int) -> None:
    if len(changes) >= most:
        return
    if isinstance(saved, Mapping) and isinstance(now, Mapping):
        for key in [*saved, *(k for k in now if k not in saved)]:
            _collect(saved.get(key), now.get(key), f"{field}.{key}".lstrip("."), changes, most)
    elif isinstance(saved, list) and isinstance(now, list):
        if len(saved) != len(now):
            changes.append((f"{field}: number of entries", len(saved), len(now)))
            return
        for i, (a, b) in enumerate(zip(saved, now, strict=True)):
            _collect(a, b, f"{field}[{i}]", changes, most)
    elif not _equal(saved, now):
        changes.append((field, saved, now))


def _equal(a: Any, b: Any) -> bool:
    numbers = isinstance(a, int | float) and isinstance(b, int | float)
    if numbers and not isinstance(a, bool) and not isinstance(b, bool):
        return math.isclose(a, b, rel_tol=TOLERANCE, abs_tol=1e-12)
    return bool(a == b)
