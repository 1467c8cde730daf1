"""What may run while a line is dragged, decided from what each part has cost in this session."""

from __future__ import annotations

from collections import deque
from statistics import median

DRAG_BUDGET_MS = 16.0
"""Processor time that one refresh may take while the mouse moves: one frame of a 60 Hz screen."""


REST = "rest"
"""The part of a refresh that always runs: reading the line, drawing plots, numbers and marks."""


class DragBudget:
    """Chooses the parts of a refresh that fit while dragging; the others follow on release.

    A part whose cost is not known yet does not run during a drag: its first run loads libraries and compiles. The
    part is taken up as soon as a run outside the drag has shown what it costs.
    """

    def __init__(self, budget_ms: float = DRAG_BUDGET_MS, *, memory: int = 5) -> None:
        self.budget_ms = budget_ms
        self._memory = memory
        self._costs: dict[str, deque[float]] = {}

    def record(self, part: str, cost_ms: float) -> None:
        """Note what one run of a part took in processor time."""
        self._costs.setdefault(part, deque(maxlen=self._memory)).append(cost_ms)

    def forget(self, part: str) -> None:
        """Forget a part whose work has changed (another image, another width)."""
        self._costs.pop(part, None)

    def cost_ms(self, part: str) -> float | None:
        """Typical cost of a part: the lesser of the median and the latest, since first runs are slow."""
        costs = self._costs.get(part)
        return None if not costs else min(median(costs), costs[-1])

    def fitting(self, parts: tuple[str, ...]) -> tuple[str, ...]:
        """The leading parts that fit beside ``REST``; each needs those before it, so the first misfit ends the list."""
        chosen: list[str] = []
        total = self.cost_ms(REST) or 0.0
        for part in parts:
            cost = self.cost_ms(part)
            if cost is None or total + cost > self.budget_ms:
                break
            total += cost
            chosen.append(part)
        return tuple(chosen)
