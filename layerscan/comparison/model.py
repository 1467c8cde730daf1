"""The predicted stack again, quickly and without draws, with one thing changed at a time."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from layerscan.errors import InputError

if TYPE_CHECKING:
    from layerscan.records import ComplexArray, FloatArray, Medium, Prediction

WORK_LIMIT = 2e7
"""Layers x wavelengths x directions of one calculation beyond which no reasons are sought: that takes two hundred."""

REACH = 0.15
"""How far beyond the predicted range the model reaches, relative, so that a peak can be followed in and out."""


@dataclass(frozen=True, kw_only=True, eq=False)
class StackModel:
    """One flat stack under one illumination; ``names`` are the rows of ``index``, ``sequence`` counts them.

    The first row is the incident medium and the last the substrate, even where a layer is of the same material.
    """

    names: tuple[str, ...]
    index: ComplexArray
    sequence: tuple[int, ...]
    thickness_nm: FloatArray
    wavelength_nm: FloatArray
    aoi_deg: float = 0.0
    aperture: float = 0.0
    polarisation: str = "unpolarised"

    @property
    def work(self) -> float:
        """Layers times wavelengths times directions and polarisations of one calculation."""
        directions = 16 if self.aperture > 0 or self.aoi_deg > 0 else 1
        return float(len(self.thickness_nm)) * self.wavelength_nm.size * directions

    def curve(self, *, through: bool = False) -> FloatArray:
        """Reflectance, or 1 - T, so that bands always point upwards."""
        import numpy as np

        from layerscan.optics.conditions import make_cone, observe_stacks

        incident = float(self.index[self.sequence[0]].real.mean())
        cone = make_cone(aoi_deg=self.aoi_deg, aperture=self.aperture, incident_index=incident, nodes=8)
        reflectance, transmittance = observe_stacks(
            self.index,
            np.array([self.sequence], dtype=np.int64),
            self.thickness_nm[None, :],
            self.wavelength_nm,
            cone=cone,
            polarisation=self.polarisation,  # type: ignore[arg-type]
        )
        result: FloatArray = 1.0 - transmittance[0] if through else reflectance[0]
        return result

    def order_numbers(self) -> FloatArray | None:
        """Bragg order at each wavelength, or None where nothing repeats."""
        import numpy as np

        from layerscan.optics.stack import order_numbers

        sequence = np.array(self.sequence, dtype=np.int64)
        grid = self.wavelength_nm
        return order_numbers(self.index, sequence, self.thickness_nm, grid, grid, self.aoi_deg)

    def scaled(self, factor: float) -> StackModel:
        """All thicknesses times a factor."""
        return replace(self, thickness_nm=self.thickness_nm * factor)

    def with_index(self, row: int, n: float, *, at_nm: float) -> StackModel:
        """The real index of one material shifted so that it is ``n`` at one wavelength; its dispersion stays."""
        import numpy as np

        index = self.index.copy()
        index[row] += n - float(np.interp(at_nm, self.wavelength_nm, index[row].real))
        return replace(self, index=index)

    def with_index_factor(self, factor: float) -> StackModel:
        """The real index of every material of the layers times a factor."""
        index = self.index.copy()
        for row in set(self.sequence[1:-1]):
            index[row] += (factor - 1.0) * index[row].real
        return replace(self, index=index)

    def swapped(self, first: int, second: int) -> StackModel:
        """Two materials exchanged within the layers; what lies in front and behind stays."""
        other = {first: second, second: first}
        inner = tuple(other.get(row, row) for row in self.sequence[1:-1])
        return replace(self, sequence=(self.sequence[0], *inner, self.sequence[-1]))

    def turned(self) -> StackModel:
        """Lit from the other end; what lies in front and behind stays."""
        inner = self.sequence[-2:0:-1]
        return replace(
            self, sequence=(self.sequence[0], *inner, self.sequence[-1]), thickness_nm=self.thickness_nm[::-1]
        )

    def repeated(self, times: int) -> StackModel:
        """The same layers again behind themselves; where both ends are of one material, the seam has one layer."""
        import numpy as np

        inner, thickness = self.sequence[1:-1], self.thickness_nm
        part, part_nm = (inner[:-1], thickness[:-1]) if inner[0] == inner[-1] and len(inner) > 1 else (inner, thickness)
        sequence = (self.sequence[0], *(part * (times - 1)), *inner, self.sequence[-1])
        return replace(self, sequence=sequence, thickness_nm=np.concatenate([*[part_nm] * (times - 1), thickness]))

    def main_materials(self) -> tuple[int, ...]:
        """The two commonest materials of the layers, or one."""
        return tuple(row for row, _ in Counter(self.sequence[1:-1]).most_common(2))

    def index_at(self, row: int, at_nm: float) -> float:
        """Real index of a material at a wavelength."""
        import numpy as np

        return float(np.interp(at_nm, self.wavelength_nm, self.index[row].real))


def rebuild_stack(prediction: Prediction) -> StackModel:
    """The stack of a prediction from its sequence, thicknesses and settings.

    Raises
    ------
    MaterialError
        A material is no longer known.
    InputError
        The prediction does not say its layers.
    """
    import numpy as np

    from layerscan.optics.materials import index_of

    structure, settings = prediction.structure, prediction.settings
    if len(structure.sequence) != len(structure.thickness_nm) + 2 or not structure.thickness_nm:
        raise InputError("The prediction does not say material and thickness of each layer. Predict again.")
    wavelength = _wider_grid(prediction.reflectance.wavelength_nm)
    first, *inner, last = structure.sequence
    layers = tuple(dict.fromkeys(inner))
    rows = [index_of(_medium(name, settings), wavelength) for name in (first, *layers)]
    if last.startswith("absorber"):  # matched to the real index of the last layer: nothing comes back from behind
        rows.append(rows[1 + layers.index(inner[-1])].real.astype(complex))
    else:
        rows.append(index_of(_medium(last, settings), wavelength))
    return StackModel(
        names=(first, *layers, last),
        index=np.array(rows),
        sequence=(0, *(1 + layers.index(name) for name in inner), len(rows) - 1),
        thickness_nm=np.array(structure.thickness_nm, dtype=np.float64),
        wavelength_nm=wavelength,
        aoi_deg=float(settings.get("angle", 0.0)),
        aperture=float(settings.get("aperture", 0.0)),
        polarisation=str(settings.get("polarisation", "unpolarised")),
    )


def _medium(name: str, settings: Mapping[str, Any]) -> Medium:
    """The medium of a name in a prediction; a user's table is named after its file and found through the settings."""
    from layerscan.optics.materials import find_medium

    folder = settings.get("materials_folder")
    for role in ("dark", "bright", "middle", "incident", "substrate"):
        text = settings.get(role)
        if text and text.strip().casefold() != "absorber":
            medium = find_medium(text, folder=folder)
            if medium.name == name:
                return medium
    return find_medium(name, folder=folder)


def _wider_grid(wavelength_nm: FloatArray) -> FloatArray:
    import numpy as np

    low, high = float(wavelength_nm[0]), float(wavelength_nm[-1])
    step = min(max(float(np.min(np.diff(wavelength_nm))), 1.0), 2.0)
    return np.arange(max(low * (1 - REACH), 150.0), high * (1 + REACH), step)
