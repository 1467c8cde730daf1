"""Preloaded by the workers that a study starts on this machine."""

from __future__ import annotations

import signal
from typing import Any


def dask_setup(worker: Any) -> None:
    """Leave Ctrl-C to the process that started the study: it stops the workers itself, and quietly."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
