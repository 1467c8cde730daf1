"""Release of a lot: tolerance limits, guard bands and a decision rule in the sense of JCGM 106:2012."""

from __future__ import annotations

import math
from dataclasses import dataclass

from layerscan.report.summary import Lot, ReleaseDecision, Verdict


@dataclass(frozen=True, kw_only=True)
class Limit:
    """Tolerance limits of one quantity; at least one of the two is a number."""

    name: str
    unit: str
    low: float | None = None
    high: float | None = None


@dataclass(frozen=True, kw_only=True)
class Rule:
    """How a value near a limit is judged.

    ``guarded``: pass inside the limits narrowed by ``guard`` U, fail outside the limits widened by it, else undecided
    (JCGM 106:2012, 8.3.2 and 8.3.3). ``probability``: pass where the probability of conforming reaches
    ``probability``, fail where it is at most 1 - ``probability``, else undecided. ``simple``: pass or fail by the
    value alone (8.2), which shares the risk and is said to.
    """

    kind: str = "guarded"
    guard: float = 1.0
    coverage_factor: float = 2.0
    probability: float = 0.95


def conformance_probability(value: float, u: float, limit: Limit, *, degrees_of_freedom: float | None = None) -> float:
    """Probability that the true value lies within the limits.

    Parameters
    ----------
    value, u : float
        In the limit's unit.
    degrees_of_freedom : float, optional
        Of u. The distribution about the value is then Student's t scaled by u, else it is normal.

    References
    ----------
    JCGM 106:2012, 7.3 and 7.4 (eq. 7 to 11): Phi((high - value) / u) - Phi((low - value) / u). For t: JCGM 101:2008,
    6.4.9.

    Examples
    --------
    >>> round(conformance_probability(2.7, 0.2, Limit(name="x", unit="mm", high=3.0)), 2)
    0.93
    """
    from scipy.special import ndtr, stdtr

    if u <= 0:
        inside = (limit.low is None or value >= limit.low) and (limit.high is None or value <= limit.high)
        return float(inside)

    def below(bound: float) -> float:
        z = (bound - value) / u
        return float(stdtr(degrees_of_freedom, z) if degrees_of_freedom else ndtr(z))

    return (1.0 if limit.high is None else below(limit.high)) - (0.0 if limit.low is None else below(limit.low))


def coverage_factor(k: float, degrees_of_freedom: float | None) -> float:
    """Factor that covers with few degrees of freedom what ``k`` covers with many (JCGM 100:2008, G.3).

    Examples
    --------
    >>> round(coverage_factor(2.0, None), 2), round(coverage_factor(2.0, 2.0), 2)
    (2.0, 4.53)
    """
    from scipy.special import ndtr, stdtrit

    return k if not degrees_of_freedom else float(stdtrit(degrees_of_freedom, ndtr(k)))


def decide(
    limit: Limit,
    *,
    group: str,
    value: float | None,
    u: float | None,
    degrees_of_freedom: float | None = None,
    rule: Rule,
    lot: Lot,
    caution: str,
    why_missing: str = "",
) -> ReleaseDecision:
    """Hold one value against its limits.

    Parameters
    ----------
    limit : Limit
    value, u : float or None
        The value and its combined standard uncertainty in the limit's unit. Without a value, or without an
        uncertainty under a rule that needs one, the decision is undecided and says why.
    degrees_of_freedom : float, optional
        Of u: where it rests on few specimens, the guard band is wider.
    rule, lot, caution
        The decision rule, what the record carries, and the caution that stands beside the decision.

    Returns
    -------
    ReleaseDecision
    """
    factor = coverage_factor(rule.coverage_factor, degrees_of_freedom)
    band = None if u is None or rule.kind != "guarded" else rule.guard * factor * u
    accept_low, accept_high = _narrowed(limit, band or 0.0)
    probability = None
    if value is not None and u is not None:
        probability = conformance_probability(value, u, limit, degrees_of_freedom=degrees_of_freedom)
    decision, reason = _judge(limit, value, u, band, probability, rule, why_missing)
    if lot.calibration_overdue and decision == "pass":
        decision, reason = (
            "undecided",
            f"{reason} But the calibration was due on {lot.calibration_due}: renew it first.",
        )
    known = band is not None or rule.kind == "simple"
    return ReleaseDecision(
        group=group,
        name=limit.name,
        unit=limit.unit,
        value=value,
        u=u,
        low=limit.low,
        high=limit.high,
        guard_band=band,
        accept_low=accept_low if known else None,
        accept_high=accept_high if known else None,
        rule=say_rule(rule),
        probability_conforming=probability,
        decision=decision,
        reason=reason,
        lot=lot,
        caution=caution,
    )


def say_rule(rule: Rule) -> str:
    """The decision rule in words."""
    if rule.kind == "simple":
        return "simple acceptance: by the value alone, the risk is shared (JCGM 106:2012, 8.2)"
    if rule.kind == "probability":
        return (
            f"pass where the probability of conforming is at least {rule.probability:g}, fail where it is at most "
            f"{1 - rule.probability:.3g}, else undecided (JCGM 106:2012, 7 and 8)"
        )
    return (
        f"guard band of {rule.guard:g} U on either side of each limit, U = {rule.coverage_factor:g} u, or more where u "
        "rests on few specimens (Student's t of the same coverage, JCGM 100:2008, G.3): pass inside the narrowed "
        "limits, fail outside the widened ones, else undecided (JCGM 106:2012, 8.3)"
    )


def _narrowed(limit: Limit, band: float) -> tuple[float | None, float | None]:
    low = None if limit.low is None else limit.low + band
    return low, None if limit.high is None else limit.high - band


def _judge(
    limit: Limit,
    value: float | None,
    u: float | None,
    band: float | None,
    probability: float | None,
    rule: Rule,
    why_missing: str,
) -> tuple[Verdict, str]:
    if value is None or not math.isfinite(value):
        return "undecided", f"There is no value: {why_missing or 'nothing was measured'}."
    if rule.kind == "simple":
        inside = conformance_probability(value, 0.0, limit) == 1.0
        return (
            ("pass", "The value lies within the limits.") if inside else ("fail", "The value lies outside the limits.")
        )
    if u is None or probability is None:
        return "undecided", f"The uncertainty is unknown: {why_missing or 'one specimen'}. No guard band can be set."
    if rule.kind == "probability":
        text = f"The probability of conforming is {probability:.3g}."
        if probability >= rule.probability:
            return "pass", text
        return ("fail", text) if probability <= 1 - rule.probability else ("undecided", text)
    return _judge_guarded(limit, value, band or 0.0)


def _judge_guarded(limit: Limit, value: float, band: float) -> tuple[Verdict, str]:
    low, high = _narrowed(limit, band)
    if low is not None and high is not None and low > high:
        text = "The guard bands leave nothing between the limits: the measurement is too uncertain for them."
        outside = value < (limit.low or 0) - band or value > (limit.high or 0) + band
        return ("fail" if outside else "undecided"), text
    if (low is None or value >= low) and (high is None or value <= high):
        return "pass", "The value lies within the limits narrowed by the guard band."
    widened_low, widened_high = _narrowed(limit, -band)
    if (widened_low is not None and value < widened_low) or (widened_high is not None and value > widened_high):
        return "fail", "The value lies outside the limits widened by the guard band."
    return "undecided", "The value lies within a guard band of a limit: a smaller uncertainty would decide it."
