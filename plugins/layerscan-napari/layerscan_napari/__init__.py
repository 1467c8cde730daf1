"""layerscan in napari: a reader, sample images and one panel. Importing it costs nothing."""

from __future__ import annotations

__version__ = "0.1.0"
