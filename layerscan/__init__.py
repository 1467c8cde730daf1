"""layerscan: layers measured in electron micrographs, and the colour that they predict.

The public names are looked up on first use, so that importing the package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from layerscan._version import __version__

_PUBLIC = {
    "open_image": "layerscan.readers.images",
    "open_spectrum": "layerscan.readers.spectra",
    "measure": "layerscan.workflow",
    "predict": "layerscan.workflow",
    "compare": "layerscan.workflow",
    "inspect": "layerscan.workflow",
    "verify": "layerscan.workflow",
    "run_demo": "layerscan.workflow",
    "open_study": "layerscan.study.notebook",
    "MeasureSettings": "layerscan.settings",
    "PredictSettings": "layerscan.settings",
    "CompareSettings": "layerscan.settings",
    "LayerscanError": "layerscan.errors",
}
_ROOMS = (
    "comparison",
    "documents",
    "errors",
    "figures",
    "geometry",
    "measurement",
    "optics",
    "readers",
    "records",
    "report",
    "settings",
    "study",
    "uncertainty",
    "workflow",
)

__all__ = ["__version__", *sorted(_PUBLIC), *_ROOMS]

if TYPE_CHECKING:
    from layerscan.errors import LayerscanError as LayerscanError
    from layerscan.readers.images import open_image as open_image
    from layerscan.readers.spectra import open_spectrum as open_spectrum
    from layerscan.settings import CompareSettings as CompareSettings
    from layerscan.settings import MeasureSettings as MeasureSettings
    from layerscan.settings import PredictSettings as PredictSettings
    from layerscan.workflow import compare as compare
    from layerscan.workflow import inspect as inspect
    from layerscan.workflow import measure as measure
    from layerscan.workflow import predict as predict
    from layerscan.workflow import run_demo as run_demo
    from layerscan.workflow import verify as verify


def __getattr__(name: str) -> Any:
    if name in _PUBLIC:
        return getattr(import_module(_PUBLIC[name]), name)
    if name in _ROOMS:
        return import_module(f"layerscan.{name}")
    raise AttributeError(f"module 'layerscan' has no attribute '{name}'")


def __dir__() -> list[str]:
    return list(__all__)
