"""Records to SVG."""

from __future__ import annotations

from importlib import import_module
from types import ModuleType


def __getattr__(name: str) -> ModuleType:
    if name.startswith("_"):
        raise AttributeError(f"module '{__name__}' has no attribute '{name}'")
    try:
        return import_module(f"{__name__}.{name}")
    except ModuleNotFoundError as error:
        if error.name != f"{__name__}.{name}":
            raise
        raise AttributeError(f"module '{__name__}' has no attribute '{name}'") from None
