"""How many specimens, images and layers a wanted interval or power takes, from the spread at each level."""

from __future__ import annotations

import math

from layerscan.errors import SettingsError
from layerscan.report.summary import PlanningRow

MOST_SPECIMENS = 1000


def variance_of_mean(
    *,
    sd_specimen_nm: float,
    sd_image_nm: float,
    sd_layer_nm: float,
    specimens: int,
    images: int,
    layers: int,
) -> float:
    """Variance [nm^2] of the mean over n specimens of m images of k layers.

    Notes
    -----
    s_specimen^2 / n + s_image^2 / (n m) + s_layer^2 / (n m k): W. G. Cochran, Sampling Techniques, 3rd ed. (1977),
    section 10.8 (three-stage sampling), without finite-population corrections.

    Examples
    --------
    >>> variance_of_mean(sd_specimen_nm=2, sd_image_nm=2, sd_layer_nm=2, specimens=2, images=2, layers=2)
    3.5
    """
    per_specimen = sd_specimen_nm**2 + sd_image_nm**2 / images + sd_layer_nm**2 / (images * layers)
    return per_specimen / specimens


def half_width(variance_of_one_specimen: float, specimens: int, *, level: float = 0.95) -> float:
    """Half width of the interval of a mean over ``specimens`` specimens, with Student's t; infinite for one."""
    from scipy.special import stdtrit

    if specimens < 2:
        return math.inf
    return float(stdtrit(specimens - 1, 0.5 + level / 2)) * math.sqrt(variance_of_one_specimen / specimens)


def power_of_t(difference: float, variance_of_one_specimen: float, specimens: int, *, level: float = 0.95) -> float:
    """Power of the two-sample t test with ``specimens`` specimens in each group (noncentral t distribution).

    References
    ----------
    J. Cohen, Statistical Power Analysis for the Behavioral Sciences, 2nd ed. (1988), chapter 2.
    """
    from scipy.special import nctdtr, stdtrit

    if specimens < 2:
        return 0.0
    if variance_of_one_specimen == 0:
        return 1.0
    nu = 2 * (specimens - 1)
    shift = abs(difference) / math.sqrt(2 * variance_of_one_specimen / specimens)
    if shift > 35:  # beyond what the distribution function resolves; the power is 1 to all digits
        return 1.0
    t = float(stdtrit(nu, 0.5 + level / 2))
    return float(1 - nctdtr(nu, shift, t) + nctdtr(nu, shift, -t))


def plan_interval(
    wanted_nm: float,
    *,
    sd_specimen_nm: float,
    sd_image_nm: float,
    sd_layer_nm: float,
    images: int,
    layers: int,
    level: float = 0.95,
) -> PlanningRow:
    """Fewest specimens whose mean has an interval of at most +- ``wanted_nm``."""
    if wanted_nm <= 0:
        raise SettingsError(f"A half width of {wanted_nm} nm cannot be wanted. Give a positive length.")
    one = _variance_of_one(sd_specimen_nm, sd_image_nm, sd_layer_nm, images, layers)
    number = next((n for n in range(2, MOST_SPECIMENS + 1) if half_width(one, n, level=level) <= wanted_nm), None)
    wanted = f"interval of the mean within +- {wanted_nm:g} nm ({level:.0%})"
    reached = None if number is None else half_width(one, number, level=level)
    return _row(wanted, number, images, layers, reached, f"+- {reached:.3g} nm" if reached is not None else "")


def plan_power(
    difference_nm: float,
    power: float,
    *,
    sd_specimen_nm: float,
    sd_image_nm: float,
    sd_layer_nm: float,
    images: int,
    layers: int,
    level: float = 0.95,
) -> PlanningRow:
    """Fewest specimens a group that find a difference of ``difference_nm`` with the wanted power."""
    if difference_nm <= 0:
        raise SettingsError(f"A difference of {difference_nm} nm cannot be looked for. Give a positive length.")
    one = _variance_of_one(sd_specimen_nm, sd_image_nm, sd_layer_nm, images, layers)
    numbers = range(2, MOST_SPECIMENS + 1)
    number = next((n for n in numbers if power_of_t(difference_nm, one, n, level=level) >= power), None)
    wanted = f"a difference of {difference_nm:g} nm found with power {power:g} at the {1 - level:.2g} level"
    reached = None if number is None else power_of_t(difference_nm, one, number, level=level)
    return _row(wanted, number, images, layers, reached, f"power {reached:.3g}" if reached is not None else "")


def _variance_of_one(specimen: float, image: float, layer: float, images: int, layers: int) -> float:
    return variance_of_mean(
        sd_specimen_nm=specimen, sd_image_nm=image, sd_layer_nm=layer, specimens=1, images=images, layers=layers
    )


def _row(wanted: str, number: int | None, images: int, layers: int, reached: float | None, words: str) -> PlanningRow:
    if number is None:
        sentence = f"Not within {MOST_SPECIMENS} specimens a group of {images} images of {layers} layers."
    else:
        sentence = f"{number} specimens a group, {images} images each of {layers} layers: {words}."
    return PlanningRow(
        wanted=wanted,
        specimens_per_group=number,
        images_per_specimen=images,
        layers_per_image=layers,
        reached=reached,
        sentence=sentence,
    )
