"""One parameter of a prediction at another value."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from layerscan.errors import SettingsError
from layerscan.records import LayerTable
from layerscan.settings import PredictSettings, change_settings

UNITS = {"angle": "deg", "aperture": "1", "immersion": "1", "scale": "1", "layers": "1", "strain": "1"}


def vary_one(
    table: LayerTable, settings: PredictSettings, name: str, value: float
) -> tuple[LayerTable, PredictSettings]:
    """Layers and settings with one parameter of a series at a value.

    Notes
    -----
    Strain is uniaxial along the layers: thickness scales by (1 + strain)^-ratio with Poisson's ratio. A ratio of 0.46
    fitted to an elastomer is common practice, no source. The indices stay as they are.
    """
    if name in ("scale", "strain"):
        if value <= (-1 if name == "strain" else 0):
            raise SettingsError(
                f"Series: {name} {value:g} leaves no layers. Give values above {-1 if name == 'strain' else 0}."
            )
        factor = value if name == "scale" else (1 + value) ** -settings.poisson_ratio
        return scale_table(table, factor), settings
    kinds: dict[str, dict[str, Any]] = {
        "angle": {"angle": value},
        "aperture": {"aperture": value},
        "immersion": {"incident": f"n={value:.10g}"},
        "layers": {"layers": round(value)},
    }
    return table, change_settings(PredictSettings, settings, kinds[name])


def scale_table(table: LayerTable, factor: float) -> LayerTable:
    """The same layers, every thickness and its uncertainty times a factor."""
    layers = tuple(
        replace(
            layer,
            thickness_nm=layer.thickness_nm * factor,
            u_nm=None if layer.u_nm is None else layer.u_nm * factor,
        )
        for layer in table.layers
    )
    stations = None if table.station_thickness_nm is None else table.station_thickness_nm * factor
    return replace(table, layers=layers, station_thickness_nm=stations)
