"""The optical constants of a material, with the range that its source covers."""

from __future__ import annotations

from typing import TYPE_CHECKING

from layerscan.figures import style
from layerscan.figures.prediction import short_name
from layerscan.figures.style import Drawing

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from layerscan.records import FloatArray, Medium

_DASHES = ("-", "--", "-.")
_COLOURS = (style.BLUE, style.VERMILION, style.GREEN)


def draw_medium(medium: Medium, *, start_nm: float = 300.0, stop_nm: float = 900.0) -> str:
    """Draw n and the extinction coefficient of a material; where its source does not cover, hatched and flagged.

    Returns
    -------
    str
        SVG text, equal bytes for equal input.
    """
    return style.render_svg(medium_drawing(medium, start_nm=start_nm, stop_nm=stop_nm))


def medium_drawing(medium: Medium, *, start_nm: float = 300.0, stop_nm: float = 900.0) -> Drawing:
    """The same figure before its format is chosen."""
    import numpy as np

    wavelength = np.linspace(start_nm, stop_nm, 301)
    constants = [np.asarray(function(wavelength)) for function in medium.index]
    absorbs = any(float(np.max(np.abs(value.imag))) > 0 for value in constants)

    def compose(figure: Figure) -> None:
        rows = 2 if absorbs else 1
        axes = figure.add_subplot(rows, 1, 1)
        for place, value in enumerate(constants):
            _draw_curve(axes, medium, wavelength, value.real, place, medium.u_index)
        axes.set(ylabel="refractive index n", xlim=(start_nm, stop_nm))
        _hatch_outside(axes, medium, start_nm, stop_nm)
        below = axes
        if absorbs:
            below = figure.add_subplot(rows, 1, 2)
            for place, value in enumerate(constants):
                _draw_curve(below, medium, wavelength, value.imag, place, None)
            below.set(ylabel="extinction coefficient", xlim=(start_nm, stop_nm))
            _hatch_outside(below, medium, start_nm, stop_nm)
        below.set_xlabel("wavelength (nm)")
        below.legend(loc="upper left", bbox_to_anchor=(0.0, -0.16 if not absorbs else -0.34), ncols=2)
        figure.suptitle(
            f"{short_name(medium.name, longest=60)} ({medium.status or 'status not stated'})",
            x=0.01,
            ha="left",
            fontsize=11,
        )

    return Drawing(
        width_in=7.5,
        height_in=5.6 if absorbs else 4.2,
        title=f"Optical constants of {medium.name}",
        description=describe_medium(medium, wavelength, [value.real for value in constants]),
        compose=compose,
    )


def describe_medium(medium: Medium, wavelength_nm: FloatArray, n: list[FloatArray]) -> str:
    """What the figure shows, in words, for readers who cannot see it."""
    curves = ", ".join(
        f"{axis} from {value[0]:.4f} at {wavelength_nm[0]:.0f} nm to {value[-1]:.4f} at {wavelength_nm[-1]:.0f} nm"
        for axis, value in zip(_axis_names(medium), n, strict=True)
    )
    limits = medium.range_nm
    span = "no range stated" if limits is None else f"valid {limits[0]:g} to {limits[1]:g} nm"
    u = "not stated" if medium.u_index is None else f"{medium.u_index:g}"
    return f"{medium.name}: {curves}; {span}, hatched outside; standard uncertainty of n {u}. Source: {medium.source}."


def _axis_names(medium: Medium) -> tuple[str, ...]:
    named = len(medium.axes) == len(medium.index)
    return medium.axes if named else tuple(f"n{place + 1}" for place in range(len(medium.index)))


def _draw_curve(
    axes: Axes, medium: Medium, wavelength_nm: FloatArray, value: FloatArray, place: int, u: float | None
) -> None:
    colour, dash = _COLOURS[place % 3], _DASHES[place % 3]
    axes.plot(wavelength_nm, value, color=colour, linestyle=dash, linewidth=1.5, label=_axis_names(medium)[place])
    if u:
        axes.fill_between(
            wavelength_nm,
            value - 2 * u,
            value + 2 * u,
            color=colour,
            alpha=0.2,
            linewidth=0,
            label="± U (k = 2)" if place == 0 else None,
        )


def _hatch_outside(axes: Axes, medium: Medium, start_nm: float, stop_nm: float) -> None:
    if medium.range_nm is None:
        return
    low, high = medium.range_nm
    outside = [(start_nm, min(low, stop_nm)), (max(high, start_nm), stop_nm)]
    for place, (left, right) in enumerate((a, b) for a, b in outside if b > a):
        axes.axvspan(
            left,
            right,
            facecolor="#eeeeee",
            edgecolor=style.GREY,
            hatch=style.HATCH_LEFT_OUT,
            lw=0,
            zorder=0,
            label=None if place else "outside the range of the source",
        )
