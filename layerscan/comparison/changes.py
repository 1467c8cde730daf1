"""What could be otherwise than predicted: each change with how far it usually is off, and the source of that."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

from layerscan.comparison.model import WORK_LIMIT, StackModel

LENGTH_SOURCES = (
    "shrinkage or swelling, compression by the knife (20-35 % with a 45 degree knife, nearly none with an oscillating "
    "one: Studer and Gnaegi, J. Microsc. 197 (2000) 94), an oblique cut, a wrong pixel size (better than 5 % when "
    "calibrated: ASTM E766); 10 % taken as usual"
)


@dataclass(frozen=True, kw_only=True, eq=False)
class Change:
    """One thing that could be otherwise.

    ``apply(value)`` gives the changed stack; ``start`` is the value now, ``limits`` how far it may go. ``prior_sd`` is
    how far it usually is off (None: no preference). A change that cannot be partial has ``choices`` instead of limits.
    """

    name: str
    unit: str
    apply: Callable[[float], StackModel]
    start: float
    limits: tuple[float, float] | None = None
    choices: tuple[float, ...] = ()
    prior_sd: float | None = None
    prior: str = ""

    @property
    def parameter(self) -> str:
        """Name with unit, as documents and tables show it."""
        return f"{self.name} ({self.unit})" if self.unit else self.name


def possible_changes(
    model: StackModel, at_nm: float, *, u_index: Mapping[str, float | None] | None = None
) -> tuple[Change, ...]:
    """The changes that are tried, each with how far it usually is off and the source of that.

    ``u_index`` holds the standard uncertainty that the source of a material states.
    """
    changes = [
        Change(
            name="scale of all thicknesses",
            unit="",
            apply=model.scaled,
            start=1.0,
            limits=(0.6, 1.6),
            prior_sd=0.10,
            prior=LENGTH_SOURCES,
        )
    ]
    main = model.main_materials()
    for row in main:
        changes.append(_index_change(model, row, at_nm, (u_index or {}).get(model.names[row])))
    if all(model.index_at(row, at_nm) > 1.1 for row in main):
        changes.append(
            Change(
                name="index of all layers",
                unit="",
                apply=model.with_index_factor,
                start=1.0,
                limits=(0.8, 1.25),
                prior_sd=0.015,
                prior="both off alike, such as by water taken up; 1.5 % taken as usual (common practice, no source)",
            )
        )
    if len(main) == 2:
        changes.append(
            Change(
                name=f"{model.names[main[0]]} and {model.names[main[1]]} swapped",
                unit="",
                apply=lambda _: model.swapped(main[0], main[1]),
                start=0.0,
                choices=(1.0,),
                prior="which material is dark was assumed; stain and detector decide it",
            )
        )
    changes += [
        Change(
            name="lit from the other end",
            unit="",
            apply=lambda _: model.turned(),
            start=0.0,
            choices=(1.0,),
            prior="matters where layers absorb or change with depth",
        ),
        Change(
            name="angle of incidence",
            unit="deg",
            apply=lambda value: _with(model, aoi_deg=value),
            start=model.aoi_deg,
            limits=(0.0, 75.0),
            prior_sd=10.0,
            prior="a tilted specimen or surface; 10 degrees taken as usual (common practice, no source)",
        ),
        _aperture_change(model),
        Change(
            name="layers in the specimen",
            unit="times those seen",
            apply=lambda value: model.repeated(round(value)),
            start=1.0,
            choices=(2.0, 4.0, 10.0) if len(model.thickness_nm) >= 2 and 10 * model.work <= WORK_LIMIT else (),
            prior="the frame shows a part of the stack",
        ),
        Change(
            name="index of the incident medium",
            unit=f"at {at_nm:.0f} nm",
            apply=lambda value: model.with_index(model.sequence[0], value, at_nm=at_nm),
            start=model.index_at(model.sequence[0], at_nm),
            choices=(1.0, 1.333, 1.515) if model.sequence[0] not in model.sequence[1:] else (),
            prior="air, water or immersion oil in front of the specimen",
        ),
    ]
    return tuple(changes)


def _index_change(model: StackModel, row: int, at_nm: float, stated: float | None) -> Change:
    name, n = model.names[row], model.index_at(row, at_nm)
    fills_gaps = n < 1.4
    prior = "0.02 taken as usual error of an index (common practice, no source)"
    if stated:
        prior = f"the source of the index states u = {stated:g}"
    elif fills_gaps:
        prior = "what fills the gaps was assumed: air 1.00, water 1.33, resin about 1.5"
    return Change(
        name=f"index in the gaps ({name} assumed)" if fills_gaps else f"index of {name}",
        unit=f"at {at_nm:.0f} nm",
        apply=lambda value: model.with_index(row, value, at_nm=at_nm),
        start=n,
        limits=(1.0, 1.65) if fills_gaps else (max(1.0, n - 0.35), n + 0.35),
        prior_sd=stated or (0.2 if fills_gaps else 0.02),
        prior=prior,
    )


def _aperture_change(model: StackModel) -> Change:
    incident = float(model.index[model.sequence[0]].real.min())
    return Change(
        name="aperture of the illumination",
        unit="NA",
        apply=lambda value: _with(model, aperture=value),
        start=model.aperture,
        limits=(0.0, 0.95 * incident),
        prior_sd=0.3,
        prior="the NA that the light fills is seldom the engraved one; 0.3 taken as usual (common practice, no source)",
    )


def _with(model: StackModel, **fields: float) -> StackModel:
    return replace(model, **fields)  # type: ignore[arg-type]
