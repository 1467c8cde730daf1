"""Joint fit of all boundaries of a profile: error-function edges that share one blur, levels shrunk to their phase.

The profile is first brought to 0 (dark) and 1 (bright) by the slowly varying levels of the phases, so shading is out of
the way. Nuisance models (projection box, gamma, edge brightening) are shared by all edges and averaged by their odds.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from layerscan.measurement.edges import (
    BLUR,
    BOX,
    BRIGHT_LEVEL,
    DARK_LEVEL,
    EDGE,
    GAMMA,
    RIM_BRIGHT,
    RIM_DARK,
    RIM_DECAY,
    SHARED,
    SKEW,
    correlation_factor,
    fit_edges,
    model_profile,
)

if TYPE_CHECKING:
    from layerscan.records import BoolArray, FloatArray


@dataclass(frozen=True, kw_only=True, eq=False)
class EdgeFit:
    """Fitted edges: positions [samples], levels (edges + 1), shared parameters, covariance of the positions.

    ``position`` is averaged over the edge models; ``best_position`` belongs to the best one, as ``level`` and
    ``shared`` do.

    ``scale`` is the factor by which the covariance was raised because the residuals exceed the stated noise or are
    correlated; ``active`` says which shared parameters were fitted.
    """

    position: FloatArray
    best_position: FloatArray
    level: FloatArray
    shared: FloatArray
    active: BoolArray
    covariance: FloatArray
    residual_rms: float
    cost: float
    scale: float
    scatter: float


@dataclass(frozen=True, kw_only=True)
class Hints:
    """What the noise says about the recording: it grows with the slope of a gamma curve, or with counts of electrons.

    ``gamma`` and ``skew`` are the values that the ratio of the noise in both phases would mean, 0 where it says
    nothing; the log odds say how much each is believed beforehand against a linear recording. ``known`` is False where
    the noise could not be compared.
    """

    gamma: float = 0.0
    skew: float = 0.0
    log_odds_gamma: float = 0.0
    log_odds_skew: float = 0.0
    known: bool = False


def read_hints(log_ratio: float, *, dark: float, bright: float, full_scale: float | None) -> Hints:
    """Hints from the logarithm of the ratio of noise variances (bright over dark) and the phases' intensities.

    Notes
    -----
    Counts of electrons have a variance proportional to the intensity; the intensities of a transmission image follow
    exp(-mass-thickness), so the ratio is then also the skew of a projected edge. Noise that is even before a gamma
    curve v + g v (1 - v) is scaled by its slope, (1 + g) at dark and (1 - g) at bright.
    """
    if not math.isfinite(log_ratio):
        return Hints()
    if abs(log_ratio) < 0.04:
        return Hints(known=True)
    gamma = -math.tanh(log_ratio / 4)
    zeros = [math.log(bright / dark)] if dark > 0 else []
    if full_scale is not None and full_scale > bright > dark:
        zeros.append(-math.log((full_scale - dark) / (full_scale - bright)))
    counts = any(abs(z) > 0.1 and 0.75 < log_ratio / z < 1.25 for z in zeros)
    return Hints(
        gamma=gamma,
        skew=log_ratio,
        log_odds_gamma=-2.0 if counts else 4.0,
        log_odds_skew=6.0 if counts else -4.0,
        known=True,
    )


def fit_boundaries(
    profile: FloatArray,
    *,
    weight: FloatArray,
    position: FloatArray,
    bright_first: bool,
    other: tuple[bool, bool] = (False, False),
    blur: float = 1.0,
    nuisance: bool = True,
    level: FloatArray | None = None,
    scatter: float | None = None,
    full: bool = True,
    hints: Hints | None = None,
    place: FloatArray | None = None,
) -> EdgeFit:
    """Fit all boundaries of a profile whose phases alternate, dark near 0 and bright near 1.

    Parameters
    ----------
    profile : (N,) float array
        Intensity against depth in samples, brought to 0 and 1.
    weight : (N,) float array
        Inverse variance of each sample; 0 leaves it out.
    position : (edges,) float array
        Where the boundaries are to start [samples].
    bright_first : bool
        Whether the segment before the first boundary takes the place of a bright one.
    other : (bool, bool)
        Whether the first and last segment are another material, whose level is free.
    blur : float
        Standard deviation of the edge blur to start from [samples].
    nuisance : bool
        Try projection box, gamma and edge brightening, and average over them by their posterior odds (information
        criterion and what the noise hints at); what they differ by enters the covariance.
    level : (edges + 1,) float array, optional
        Levels of an earlier fit to start from.
    scatter : float, optional
        Standard deviation of the levels about their phase to start from.
    full : bool
        Work out the covariance.
    hints : Hints, optional
        What the noise says about gamma and about counting.
    place : (2, edges) float array, optional
        Expected position and its precision [1/samples^2, in units of the cost] of boundaries beyond the data.

    Returns
    -------
    EdgeFit

    Notes
    -----
    Sharing blur and levels keeps the uncertainty near the bound where free levels raise it 1.4 to 5 times; the levels'
    scatter about their phase is estimated from the fit itself (empirical Bayes). A layer thinner than about three
    times the blur leans on these shared values. The model cannot see a distortion that moves all edges alike.

    References
    ----------
    G. Schwarz, Ann. Statist. 6 (1978) 461, doi 10.1214/aos/1176344136 (information criterion).
    """
    count = len(profile)
    depth = np.arange(count, dtype=np.float64)
    segments = len(position) + 1
    target = np.where(np.arange(segments) % 2 == 0, float(bright_first), float(not bright_first))
    free = np.zeros(segments, bool)
    free[0], free[-1] = other
    shared = np.zeros(SHARED)
    shared[BLUR], shared[RIM_DECAY] = blur, 2.0
    active = plain_model()
    state = (position.astype(np.float64), target.copy() if level is None else level.astype(np.float64), shared)
    if level is not None:
        shared[EDGE:] = _phase_levels(state[1] - target, target, free)
    used = int((weight > 0).sum())
    belief = np.zeros((2, SHARED))
    belief[1, EDGE:] = 1e-3
    place = np.zeros((2, len(position))) if place is None else place
    rounds = 2 if scatter is None else 1
    scatter = 0.15 if scatter is None else scatter
    fit: Any = None
    for _ in range(rounds):
        precision = np.where(free, 1e-6, 1 / scatter**2)
        fit = fit_edges(depth, profile, weight, *state, active, target, precision, belief, place, 8, 0.3, False)
        state = fit[:3]
        off = (state[1] - target - np.where(target < 0.5, state[2][DARK_LEVEL], state[2][BRIGHT_LEVEL]))[~free]
        previous, scatter = scatter, float(np.clip(1.2 * np.sqrt(np.mean(off**2)) if len(off) > 4 else 0.15, 0.01, 0.3))
        if abs(previous - scatter) < 0.2 * scatter:
            break
    precision = np.where(free, 1e-6, 1 / scatter**2)
    if nuisance and used > 40 and segments > 4:
        averaged = _average_models(depth, profile, weight, fit, target, precision, place, used, hints or Hints(), full)
        return _finish(depth, profile, weight, averaged, precision, used, scatter)
    if full:
        fit = fit_edges(depth, profile, weight, *state, active, target, precision, belief, place, 15, 1e-3, True)
    return _finish(depth, profile, weight, (*fit[:5], active, np.zeros_like(fit[4]), fit[0]), precision, used, scatter)


RIM_DOUBT = 0.2
"""Standard uncertainty, in blurs, of a shift of all edges towards one phase where they are brightened.

The shape of the brightening and the recording's response (gamma) are not known and move all edges alike, which no fit
to the same picture can tell. The figure was set on made sections with gamma 0.75 to 1.35. Periods are not touched.
"""


def plain_model() -> BoolArray:
    """Which shared parameters a plain edge has: blur and the phases' levels."""
    active = np.zeros(SHARED, bool)
    active[[BLUR, DARK_LEVEL, BRIGHT_LEVEL]] = True
    return active


def _phase_levels(off: FloatArray, target: FloatArray, free: BoolArray) -> FloatArray:
    """Median offset of each phase's levels from 0 and 1."""
    out = np.zeros(2)
    for k in (0, 1):
        chosen = (np.round(target) == k) & ~free
        if chosen.any():
            out[k] = np.median(off[chosen])
    return out


@dataclass(frozen=True, kw_only=True)
class _Model:
    """One hypothesis about the edges: start values, which shared parameters are free, log odds beforehand."""

    start: dict[int, float]
    free: tuple[int, ...] = ()
    log_odds: float = 0.0
    inward: float = 0.0  # how far the boundaries are moved into the bright layers to start with, in blurs
    steps: int = 2  # steps after which a model that gains nothing is given up


def _models(blur: float, hints: Hints) -> list[_Model]:
    """Hypotheses beyond the plain edge."""
    box = {BOX: 1.7 * blur, BLUR: 0.87 * blur}
    rim = {RIM_BRIGHT: 0.15, RIM_DARK: 0.05, RIM_DECAY: 1.3 * blur}
    rims = (RIM_BRIGHT, RIM_DARK, RIM_DECAY)
    strong = {RIM_BRIGHT: 0.8, RIM_DARK: 0.3, RIM_DECAY: 1.1 * blur, BLUR: 0.7 * blur}
    models = [
        _Model(start=box, free=(BOX,), log_odds=-1.0),
        _Model(start=rim, free=rims, log_odds=-1.5),
        _Model(start=strong, free=rims, log_odds=-1.5, inward=0.5, steps=6),
    ]
    if not hints.known:
        models.append(_Model(start={GAMMA: 0.0}, free=(GAMMA,), log_odds=-2.0))
    if hints.gamma:
        odds = hints.log_odds_gamma
        models.append(_Model(start={GAMMA: hints.gamma}, log_odds=odds))
        models.append(_Model(start={**rim, GAMMA: hints.gamma}, free=rims, log_odds=odds - 1.5))
        models.append(_Model(start={**box, SKEW: hints.skew}, free=(BOX,), log_odds=hints.log_odds_skew - 1.0))
    return models


def _beliefs(blur: float, unit: float) -> FloatArray:
    """Mean and precision of what is known beforehand of the shared parameters, in units of the cost.

    Common practice, no source: edge brightening is a fraction of the contrast and about as wide as the blur; gamma
    stays near 1; a projection box is of the order of the blur.
    """
    mean = np.array([0.0, 0.0, 0.0, 0.0, 0.0, 1.3 * blur, 0.0, 0.0, 0.0])
    sd = np.array([math.inf, 4.0 * blur, 0.2, 0.4, 0.25, 0.4 * blur, 0.5, 3.0, 3.0])
    return np.stack([mean, unit / sd**2])


def _average_models(
    depth: FloatArray,
    profile: FloatArray,
    weight: FloatArray,
    fit: Any,
    target: FloatArray,
    precision: FloatArray,
    place: FloatArray,
    used: int,
    hints: Hints,
    full: bool,
) -> Any:
    """Fit the hypotheses and average over them by their posterior odds (Laplace's approximation of the evidence).

    Returns (position, level, shared, cost, covariance, active, covariance between models, position of the best).
    """
    plain = plain_model()
    blur = float(fit[2][BLUR])
    unit = fit[3] / used
    belief = _beliefs(blur, unit)
    fit = fit_edges(
        depth, profile, weight, fit[0], fit[1], fit[2], plain, target, precision, belief, place, 6, 0.02, False
    )
    candidates = [(0.0, fit, plain)]
    for model in _models(blur, hints):
        active = plain.copy()
        active[list(model.free)] = True
        shared = fit[2].copy()
        for name, value in model.start.items():
            shared[name] = value
        begin = fit[0] + model.inward * blur * np.where(target[:-1] > 0.5, -1.0, 1.0)
        trial = fit_edges(
            depth, profile, weight, begin, fit[1], shared, active, target, precision, belief, place, model.steps, 0.3,
            False,
        )  # fmt: skip
        if not trial[5] or (model.log_odds <= 0 and trial[3] > fit[3] - unit):
            continue  # two steps gain less than the model costs
        trial = fit_edges(
            depth,
            profile,
            weight,
            trial[0],
            trial[1],
            trial[2],
            active,
            target,
            precision,
            belief,
            place,
            10,
            0.05,
            False,
        )
        if trial[5]:
            candidates.append((model.log_odds, trial, active))
    least = min(trial[3] for _, trial, _ in candidates)
    scores = np.array(
        [
            odds - 0.5 * used * math.log(trial[3] / least) - _occam(trial[6], active, belief, least / used)
            for odds, trial, active in candidates
        ]
    )
    odds = np.exp(scores - scores.max())
    odds = np.where(odds > 0.01, odds, 0.0)
    odds /= odds.sum()
    best = int(np.argmax(odds))
    kept = []
    for i in np.flatnonzero(odds):
        _, trial, active = candidates[i]
        rounds, tolerance = (15, 1e-3) if i == best else (3, 0.05)
        kept.append(
            fit_edges(
                depth,
                profile,
                weight,
                trial[0],
                trial[1],
                trial[2],
                active,
                target,
                precision,
                belief,
                place,
                rounds,
                tolerance,
                full,
            )
        )
    share = odds[odds > 0]
    chosen = kept[int(np.argmax(share))]
    position = sum(p * trial[0] for p, trial in zip(share, kept, strict=True))
    covariance = sum(p * trial[4] for p, trial in zip(share, kept, strict=True))
    between = np.zeros_like(covariance)
    for p, trial in zip(share, kept, strict=True):
        off = trial[0] - position
        between += p * np.outer(off, off)
    return position, chosen[1], chosen[2], chosen[3], covariance, candidates[best][2], between, chosen[0]


def _occam(inverse: FloatArray, active: BoolArray, belief: FloatArray, unit: float) -> float:
    """Half the logarithm of how much the data narrow the free nuisance parameters down."""
    free = [m for m in np.flatnonzero(active) if BLUR < m < EDGE]
    if not free:
        return 0.0
    sign, log_det = np.linalg.slogdet(inverse[np.ix_(free, free)] * unit)
    prior = float(np.sum(np.log(unit / belief[1, free])))
    return 0.5 * max(prior - float(log_det), 0.0) if sign > 0 else 0.0


def _finish(
    depth: FloatArray,
    profile: FloatArray,
    weight: FloatArray,
    fit: Any,
    precision: FloatArray,
    used: int,
    scatter: float,
) -> EdgeFit:
    position, level, shared, cost, covariance, active, between, own_position = fit
    residual = profile - model_profile(depth, own_position, level, shared, active)
    free_parameters = len(position) + int(active.sum()) + int((precision < 1e-3).sum()) + 2
    chi2 = float((weight * residual**2).sum()) / max(used - free_parameters, 1)
    blur = shared[BLUR]
    factor = correlation_factor(residual, weight, int(min(max(3 * blur, 2), 20)))
    scale = max(chi2, 0.0) * max(factor, 1.0)
    rms = math.sqrt(float((weight * residual**2).sum() / max(float(weight.sum()), 1e-300)))
    side = np.where(np.arange(len(position)) % 2 == 0, 1.0, -1.0)
    doubt = RIM_DOUBT * float(blur) if active[RIM_DECAY] else 0.0
    return EdgeFit(
        position=position,
        best_position=own_position,
        level=level,
        shared=shared,
        active=active,
        covariance=covariance * scale + between + doubt**2 * np.outer(side, side),
        residual_rms=rms,
        cost=float(cost),
        scale=scale,
        scatter=scatter,
    )
