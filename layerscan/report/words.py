"""Numbers and flags as the pages print them."""

from __future__ import annotations

import hashlib
import math
from collections.abc import Iterable
from functools import lru_cache
from typing import TYPE_CHECKING, Any

from layerscan.errors import InputError
from layerscan.figures.style import colour_words, number_text, plain_text
from layerscan.records import FLAGS

if TYPE_CHECKING:
    from jinja2 import Environment

    from layerscan.records import Average, Colour, Peak, Reason

NOT_STATED, NOT_KNOWN = "not stated", "not known"


@lru_cache(maxsize=1)
def page_environment() -> Environment:
    """Templates of the pages: every value is escaped, an unknown name is an error."""
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader("layerscan", "report/templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        finalize=_finalize,
    )
    environment.filters.update(
        small=small,
        number=number,
        stated=stated,
        average=average_words,
        colour_words=colour_words,
        percent=percent,
        flag=flag_words,
    )
    environment.globals.update(unknown=NOT_KNOWN, unstated=NOT_STATED)
    return environment


def _finalize(value: Any) -> Any:
    """None is never printed as such, and no character is printed that HTML does not allow."""
    from markupsafe import Markup

    if value is None:
        return NOT_KNOWN
    return plain_text(value) if isinstance(value, str) and not isinstance(value, Markup) else value


def number(value: float | None, u: float | None = None) -> str:
    """A number with its standard uncertainty, or "not known"."""
    return NOT_KNOWN if value is None else number_text(value, u)


def small(value: float | None, digits: int = 2) -> str:
    """An uncertainty, a spread or a share of a budget: two significant digits (JCGM 100:2008, 7.2.6).

    Examples
    --------
    >>> small(1.9162), small(0.0058127), small(123.4)
    ('1.9', '0.0058', '123')
    """
    if value is None or not math.isfinite(value):
        return NOT_KNOWN
    if value == 0:
        return "0"
    decimals = max(0, digits - 1 - math.floor(math.log10(abs(value))))
    return f"{value:.{decimals}f}" if decimals < 8 else f"{value:.{digits}g}"


def stated(value: Any) -> str:
    """What somebody stated, or "not stated" where it is blank."""
    return NOT_STATED if value is None or value == "" else str(value)


def percent(value: float | None) -> str:
    """A share as a percentage; what is not certain is not rounded to 100 %."""
    if value is None:
        return NOT_KNOWN
    if 0.995 <= value < 1:
        return f"{100 * value:.2f} %" if value < 0.99995 else "above 99.99 %"
    return f"{100 * value:.0f} %" if abs(value) >= 0.0995 else f"{small(100 * value)} %"


def average_words(average: Average | None) -> str:
    """Mean, u and number in one phrase."""
    if average is None:
        return NOT_KNOWN
    without = " (u not known)" if average.u is None else ""
    return f"{number_text(average.mean, average.u)} nm{without}, n = {average.n}"


def flag_words(name: str) -> str:
    """What a flag says to the user."""
    return FLAGS.get(name, name)


def main_peak(peaks: Iterable[Peak]) -> Peak | None:
    """The highest peak."""
    return max(peaks, key=lambda peak: peak.reflectance, default=None)


def swatch_words(colour: Colour) -> str:
    """Text alternative of a swatch."""
    light, a, b = (round(value, 1) + 0.0 for value in colour.lab)
    shown = "" if colour.in_gamut else ", outside sRGB, nearest shown"
    return f"{colour_words(colour)} (L* {light:.1f}, a* {a:.1f}, b* {b:.1f}{shown})"


def reason_rows(reasons: Iterable[Reason]) -> list[dict[str, str]]:
    """Reasons as lines of a table."""
    rows = []
    for reason in reasons:
        values = ", ".join(number_text(value, u) for value, u in zip(reason.values, reason.u, strict=True))
        rows.append(
            {
                "parameters": ", ".join(reason.parameters),
                "needed": values,
                "prior": "; ".join(reason.prior),
                "evidence": NOT_KNOWN if reason.evidence is None else f"{reason.evidence:.1f}",
                "alike": ", ".join(reason.indistinguishable_from) or "none",
            }
        )
    return rows


def anchor(text: str) -> str:
    """A name for links inside a page: letters and digits of the text and a hash that keeps it unique."""
    letters = "".join(c if c.isascii() and c.isalnum() else "-" for c in text.lower()).strip("-")[:40]
    return f"{letters or 'part'}-{hashlib.sha256(text.encode('utf-8', 'surrogatepass')).hexdigest()[:6]}"


def check_swatch(colour: Colour) -> str:
    """The swatch as ``#rrggbb``.

    Raises
    ------
    InputError
        It is anything else: what stands in a style must be a colour.
    """
    code = colour.srgb
    if len(code) != 7 or code[0] != "#" or any(c not in "0123456789abcdefABCDEF" for c in code[1:]):
        raise InputError(f"Colour '{code}' is no '#rrggbb'.")
    return code
