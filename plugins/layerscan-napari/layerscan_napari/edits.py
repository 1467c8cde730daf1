"""Corrections of boundaries by hand, as the words that ``MeasureSettings.edits`` holds.

Indices and depths refer to the result without edits, so the order of the corrections does not matter.
"""

from __future__ import annotations


def move_boundary(edits: tuple[str, ...], *, index: int, shift_nm: float) -> tuple[str, ...]:
    """Move a boundary by ``shift_nm`` along the depth from where it was found; replaces an earlier correction of it.

    Examples
    --------
    >>> move_boundary(("move 3 2 nm",), index=3, shift_nm=-4.5)
    ('move 3 -4.5 nm',)
    """
    kept = drop_correction(edits, index=index)
    return kept if shift_nm == 0 else (*kept, f"move {index} {shift_nm:.6g} nm")


def delete_boundary(edits: tuple[str, ...], *, index: int) -> tuple[str, ...]:
    """Leave a boundary out."""
    return (*drop_correction(edits, index=index), f"delete {index}")


def add_boundary(edits: tuple[str, ...], *, depth_nm: float) -> tuple[str, ...]:
    """Add a boundary at a depth of the result without edits."""
    edit = f"add {depth_nm:.6g} nm"
    return edits if edit in edits else (*edits, edit)


def drop_correction(edits: tuple[str, ...], *, index: int) -> tuple[str, ...]:
    """Take back what was done to one boundary."""
    from layerscan.settings import parse_edit

    return tuple(edit for edit in edits if parse_edit(edit)[1] != index)


def shift_of(edits: tuple[str, ...], *, index: int) -> float:
    """How far a boundary has been moved, in nm; 0 where it has not."""
    from layerscan.settings import parse_edit

    shifts = [length for verb, i, length in map(parse_edit, edits) if verb == "move" and i == index]
    return shifts[-1] or 0.0 if shifts else 0.0
