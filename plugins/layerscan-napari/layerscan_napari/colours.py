"""Colours of the panel: Okabe and Ito's set, told apart by the colour-blind, with a dash or symbol beside each.

Reference: M. Okabe, K. Ito, Color Universal Design (2008), jfly.uni-koeln.de/color. Black is left to the text.
"""

from __future__ import annotations

from dataclasses import dataclass

ORANGE = "#E69F00"
SKY = "#56B4E9"
GREEN = "#009E73"
YELLOW = "#F0E442"
BLUE = "#0072B2"
VERMILION = "#D55E00"
PURPLE = "#CC79A7"

THICKNESS_COLOURMAP = "viridis"
"""Perceptually even and readable by the colour-blind; thickness in the image and its legend use the same one."""


@dataclass(frozen=True, kw_only=True)
class PlotColours:
    """Colours of the plots on one background."""

    background: str
    text: str
    grid: str
    profile: str
    boundary: str
    dark: str
    bright: str
    other: str
    predicted: str
    observed: str


DARK_THEME = PlotColours(
    background="#262930", text="#f0f1f2", grid="#5a626c", profile="#f0f1f2", boundary=ORANGE,
    dark=SKY, bright=YELLOW, other=PURPLE, predicted=SKY, observed=ORANGE,
)  # fmt: skip
LIGHT_THEME = PlotColours(
    background="#ffffff", text="#20242a", grid="#b8bec6", profile="#20242a", boundary=VERMILION,
    dark=BLUE, bright=ORANGE, other=PURPLE, predicted=BLUE, observed=VERMILION,
)  # fmt: skip


def colours_for(background: tuple[int, int, int]) -> PlotColours:
    """Plot colours for a theme whose background is this red, green, blue (0-255); they keep that background."""
    red, green, blue = background
    base = LIGHT_THEME if 0.299 * red + 0.587 * green + 0.114 * blue > 127 else DARK_THEME
    return PlotColours(**{**base.__dict__, "background": f"#{red:02x}{green:02x}{blue:02x}"})
