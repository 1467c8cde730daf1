"""Statistics that respect the design: layers within images within specimens within groups. Specimens are the units."""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

from layerscan.errors import SettingsError
from layerscan.report.summary import DriftRow, Estimate, TestRow
from layerscan.uncertainty import combine

if TYPE_CHECKING:
    import numpy as np

    from layerscan.records import FloatArray

DUNNETT_SEED = 20_240_101


def estimate_mean(
    values: Sequence[float],
    *,
    quantity: str = "",
    level: float = 0.95,
    u_systematic: float | None = None,
    n_images: int | None = None,
    n_layers: int | None = None,
) -> Estimate:
    """Mean over specimens with its interval (Student's t) and the part of u that all specimens share.

    Parameters
    ----------
    values : (specimens,) sequence of float
        One value a specimen.
    u_systematic : float, optional
        Standard uncertainty common to all values (calibration, geometry), in the unit of the values. More specimens
        do not shrink it.

    Returns
    -------
    Estimate
        ``u`` combines sampling and systematic part; the interval uses Student's t for the sampling part with the
        Welch-Satterthwaite degrees of freedom (JCGM 100:2008, G.4), the systematic part counting as known.
    """
    import numpy as np
    from scipy.special import stdtrit

    x = np.asarray(values, dtype=float)
    n = x.size
    mean = _mean(x)
    notes: list[str] = []
    if u_systematic is None:
        notes.append("no systematic uncertainty is known")
    if n < 2:
        notes.append("one specimen: nothing says how specimens differ")
        return Estimate(
            quantity=quantity,
            mean=mean,
            u=None,
            u_systematic=u_systematic,
            level=level,
            n_specimens=n,
            n_images=n_images,
            n_layers=n_layers,
            notes=tuple(notes),
        )
    sd = float(np.std(x - mean, ddof=1))
    u_sampling = sd / math.sqrt(n)
    u = combine(u_sampling, u_systematic) or 0.0
    nu = (n - 1) * (u / u_sampling) ** 4 if u_sampling > 0 else None
    half = u * float(stdtrit(min(nu or 1e9, 1e9), 0.5 + level / 2))
    return Estimate(
        quantity=quantity,
        mean=mean,
        u=u,
        u_sampling=u_sampling,
        u_systematic=u_systematic,
        sd=sd,
        low=mean - half,
        high=mean + half,
        level=level,
        degrees_of_freedom=nu,
        n_specimens=n,
        n_images=n_images,
        n_layers=n_layers,
        notes=tuple(notes),
    )


def compare_groups(
    values: Sequence[float],
    groups: Sequence[str],
    specimens: Sequence[str],
    *,
    quantity: str = "",
    unit: str = "nm",
    level: float = 0.95,
    adjust: str = "holm",
    reference_group: str | None = None,
    equivalence: float | None = None,
) -> tuple[TestRow, ...]:
    """Compare groups on their specimens' values.

    Parameters
    ----------
    values : (specimens,) sequence of float
        One value a specimen: the mean over its images.
    groups, specimens : (specimens,) sequences of str
        Which group and specimen each value belongs to.
    adjust : {"holm", "tukey", "dunnett"}
        For three or more groups; Dunnett compares with ``reference_group``.
    equivalence : float, optional
        Margin, in the unit of the values, for two one-sided tests.

    Returns
    -------
    tuple of TestRow
        Two groups: Welch's t. More: one-way ANOVA, then the pairs. A pair that cannot be tested says why.

    Raises
    ------
    SettingsError
        Several values of one specimen (layers or images are no independent specimens), or an unknown group.

    Notes
    -----
    Layers of one specimen share what made the specimen: treating them as independent turned up differences between
    equal groups in 71 to 77 % of simulated studies instead of 5 % (specimen SD 5, image SD 3, layer SD 15, three
    images of 100 layers). Tukey's and Dunnett's tests suppose equal spread in all groups; Holm's pairs do not.

    References
    ----------
    B. L. Welch, Biometrika 34 (1947) 28. S. Holm, Scand. J. Statist. 6 (1979) 65. C. W. Dunnett, J. Am. Stat. Assoc.
    50 (1955) 1096. D. J. Schuirmann, J. Pharmacokinet. Biopharm. 15 (1987) 657 (two one-sided tests).
    L. V. Hedges, J. Educ. Stat. 6 (1981) 107 (effect size).

    Examples
    --------
    >>> rows = compare_groups([201, 199, 200, 210, 212, 211], list("AAABBB"), ["1", "2", "3", "4", "5", "6"])
    >>> rows[0].name, round(rows[0].difference, 1)
    ("Welch's t test", -11.0)
    """
    import numpy as np

    _refuse_repeated_specimens(groups, specimens)
    table: dict[str, np.ndarray] = {}
    for group in dict.fromkeys(groups):
        table[group] = np.array([v for v, g in zip(values, groups, strict=True) if g == group], dtype=float)
    if reference_group is not None and reference_group not in table:
        raise SettingsError(f"Reference group '{reference_group}' has no specimen. Groups are {', '.join(table)}.")
    if len(table) < 2:
        return ()
    testable = {group: x for group, x in table.items() if x.size >= 2}
    rows: list[TestRow] = []
    if len(table) > 2 and len(testable) > 2:
        rows.append(_one_way_anova(testable, level))
    many = len(testable) > 2
    if many and adjust == "tukey":
        rows += _tukey(testable, level)
    elif many and adjust == "dunnett" and reference_group in testable:
        rows += _dunnett(testable, str(reference_group), level)
    else:
        rows += _pairs(testable, level)
    rows += [_impossible(pair, table) for pair in itertools.combinations(table, 2) if not set(pair) <= set(testable)]
    if equivalence is not None:
        rows += [
            _equivalence(a, b, testable, margin=equivalence, level=level, unit=unit)
            for a, b in itertools.combinations(testable, 2)
        ]
    return tuple(_finish(row, quantity, unit) for row in rows)


def _refuse_repeated_specimens(groups: Sequence[str], specimens: Sequence[str]) -> None:
    pairs = list(zip(groups, specimens, strict=True))
    distinct = set(pairs)
    if len(distinct) < len(pairs):
        raise SettingsError(
            f"{len(pairs)} values of {len(distinct)} specimens: values of one specimen are not independent, and a test "
            "on layers or images finds differences that are not there. Average to one value a specimen first."
        )


def _mean(x: FloatArray) -> float:
    """Mean without loss of digits where the values are large beside their spread."""
    first = float(x[0])
    return first + math.fsum(float(v) - first for v in x) / x.size


def _centred(table: Mapping[str, FloatArray]) -> dict[str, FloatArray]:
    """The same groups about a common value: sums of squares then keep their digits."""
    first = float(next(iter(table.values()))[0])
    return {group: x - first for group, x in table.items()}


def welch_test(a: FloatArray, b: FloatArray, *, level: float = 0.95) -> TestRow:
    """Welch's t test of two groups, with the interval of the difference and Hedges' g.

    Raises
    ------
    SettingsError
        A group has fewer than two values.
    """
    import numpy as np
    from scipy.special import stdtr, stdtrit

    a, b = np.asarray(a, dtype=float), np.asarray(b, dtype=float)
    if min(a.size, b.size) < 2:
        raise SettingsError("Welch's test needs two specimens in each group. Add specimens.")
    difference = _mean(a) - _mean(b)
    va, vb = (float(np.var(x - _mean(x), ddof=1)) / x.size for x in (a, b))
    se = math.sqrt(va + vb)
    if se == 0:
        return TestRow(
            quantity="",
            unit="",
            name="Welch's t test",
            compares=(),
            difference=difference,
            n=(a.size, b.size),
            possible=False,
            sentence="The specimens of each group do not differ at all: there is no spread to test against.",
        )
    nu = (va + vb) ** 2 / (va**2 / (a.size - 1) + vb**2 / (b.size - 1))
    t = difference / se
    half = se * float(stdtrit(nu, 0.5 + level / 2))
    g, low, high = hedges_g(a, b, level=level)
    return TestRow(
        quantity="",
        unit="",
        name="Welch's t test",
        compares=(),
        statistic_name="t",
        statistic=t,
        degrees_of_freedom=(nu,),
        p_value=float(2 * stdtr(nu, -abs(t))),
        difference=difference,
        low=difference - half,
        high=difference + half,
        level=level,
        effect_size_name="Hedges' g",
        effect_size=g,
        effect_low=low,
        effect_high=high,
        n=(a.size, b.size),
    )


def hedges_g(a: FloatArray, b: FloatArray, *, level: float = 0.95) -> tuple[float, float, float]:
    """Standardised difference without small-sample bias, and its interval from the noncentral t distribution.

    References
    ----------
    L. V. Hedges, J. Educ. Stat. 6 (1981) 107, eq. 6e (exact correction); G. Cumming & S. Finch, Educ. Psychol. Meas.
    61 (2001) 532 (interval).
    """
    import numpy as np
    from scipy.optimize import brentq
    from scipy.special import gammaln, nctdtr

    na, nb = len(a), len(b)
    nu = na + nb - 2
    pooled = math.sqrt((float(np.var(a, ddof=1)) * (na - 1) + float(np.var(b, ddof=1)) * (nb - 1)) / nu)
    d = (_mean(np.asarray(a)) - _mean(np.asarray(b))) / pooled
    scale = math.sqrt(na * nb / (na + nb))
    bias = math.exp(gammaln(nu / 2) - gammaln((nu - 1) / 2)) / math.sqrt(nu / 2) if nu > 1 else 1.0
    t = d * scale
    reach = 10 + 5 * abs(t)

    def bound(probability: float) -> float:
        return float(brentq(lambda ncp: nctdtr(nu, ncp, t) - probability, t - reach, t + reach)) / scale

    try:
        low, high = bound(0.5 + level / 2), bound(0.5 - level / 2)
    except ValueError:  # the distribution function runs out of digits: very large effects
        half = 2 * math.sqrt((na + nb) / (na * nb) + d * d / (2 * (na + nb)))
        low, high = d - half, d + half
    return bias * d, bias * low, bias * high


def _one_way_anova(table: Mapping[str, FloatArray], level: float) -> TestRow:
    from scipy.stats import f_oneway

    centred = _centred(table)
    result = f_oneway(*centred.values())
    k, n = len(table), sum(x.size for x in table.values())
    f = float(result.statistic)
    if not math.isfinite(f):
        return TestRow(
            quantity="",
            unit="",
            name="one-way ANOVA",
            compares=tuple(table),
            n=tuple(x.size for x in table.values()),
            possible=False,
            sentence="The specimens of each group do not differ at all: there is no spread to test against.",
        )
    omega = max((k - 1) * (f - 1) / ((k - 1) * (f - 1) + n), 0.0)
    return TestRow(
        quantity="",
        unit="",
        name="one-way ANOVA",
        compares=tuple(table),
        statistic_name="F",
        statistic=f,
        degrees_of_freedom=(float(k - 1), float(n - k)),
        p_value=float(result.pvalue),
        level=level,
        effect_size_name="omega squared",
        effect_size=omega,
        n=tuple(x.size for x in table.values()),
    )


def _pairs(table: Mapping[str, FloatArray], level: float) -> list[TestRow]:
    pairs = list(itertools.combinations(table, 2))
    rows = [replace(welch_test(table[a], table[b], level=level), compares=(a, b)) for a, b in pairs]
    if len(rows) < 2:
        return rows
    tested = [row for row in rows if row.p_value is not None]
    adjusted = iter(adjust_holm([row.p_value for row in tested if row.p_value is not None]))
    note = "the interval is for this pair alone; the p value is adjusted for all pairs"
    return [
        row if row.p_value is None else replace(row, p_adjusted=next(adjusted), adjustment="Holm", notes=(note,))
        for row in rows
    ]


def adjust_holm(p_values: Sequence[float]) -> list[float]:
    """P values adjusted for their number by Holm's step-down procedure (Scand. J. Statist. 6 (1979) 65).

    Examples
    --------
    >>> adjust_holm([0.01, 0.04, 0.03])
    [0.03, 0.06, 0.06]
    """
    order = sorted(range(len(p_values)), key=lambda i: p_values[i])
    adjusted = [1.0] * len(p_values)
    highest = 0.0
    for rank, i in enumerate(order):
        highest = max(highest, min(1.0, (len(p_values) - rank) * p_values[i]))
        adjusted[i] = highest
    return adjusted


def _tukey(table: Mapping[str, FloatArray], level: float) -> list[TestRow]:
    from scipy.stats import tukey_hsd

    names = list(table)
    result = tukey_hsd(*_centred(table).values())
    interval = result.confidence_interval(level)
    rows = []
    for i, j in itertools.combinations(range(len(names)), 2):
        a, b = table[names[i]], table[names[j]]
        rows.append(
            replace(
                _bare_pair(a, b, names[i], names[j], level),
                name="Tukey's test",
                p_adjusted=float(result.pvalue[i, j]),
                adjustment="Tukey",
                low=float(interval.low[i, j]),
                high=float(interval.high[i, j]),
            )
        )
    return rows


def _dunnett(table: Mapping[str, FloatArray], reference: str, level: float) -> list[TestRow]:
    import numpy as np
    from scipy.stats import dunnett

    others = [group for group in table if group != reference]
    centred = _centred(table)
    rng = np.random.default_rng(DUNNETT_SEED)
    result = dunnett(*(centred[group] for group in others), control=centred[reference], random_state=rng)
    interval = result.confidence_interval(level)
    return [
        replace(
            _bare_pair(table[group], table[reference], group, reference, level),
            name="Dunnett's test",
            statistic_name="t",
            statistic=float(result.statistic[i]),
            p_adjusted=float(result.pvalue[i]),
            adjustment="Dunnett",
            low=float(interval.low[i]),
            high=float(interval.high[i]),
        )
        for i, group in enumerate(others)
    ]


def _bare_pair(a: FloatArray, b: FloatArray, name_a: str, name_b: str, level: float) -> TestRow:
    g, low, high = hedges_g(a, b, level=level)
    return TestRow(
        quantity="",
        unit="",
        name="",
        compares=(name_a, name_b),
        difference=_mean(a) - _mean(b),
        level=level,
        effect_size_name="Hedges' g",
        effect_size=g,
        effect_low=low,
        effect_high=high,
        n=(a.size, b.size),
        notes=("supposes the same spread in all groups",),
    )


def _equivalence(a: str, b: str, table: Mapping[str, FloatArray], *, margin: float, level: float, unit: str) -> TestRow:
    """Two one-sided Welch tests; the interval of level 1 - 2 alpha lies within the margin where both pass."""
    from scipy.special import stdtr, stdtrit

    wide = welch_test(table[a], table[b], level=2 * level - 1)
    name = "equivalence (two one-sided tests)"
    if wide.difference is None or wide.high is None or not wide.degrees_of_freedom:
        return replace(wide, name=name, compares=(a, b))
    nu = wide.degrees_of_freedom[0]
    se = (wide.high - wide.difference) / float(stdtrit(nu, level))
    p = float(stdtr(nu, (abs(wide.difference) - margin) / se))
    alpha = 1 - level
    verdict = "are equivalent" if p < alpha else "are not shown to be equivalent"
    return replace(
        wide,
        name=name,
        compares=(a, b),
        statistic=(abs(wide.difference) - margin) / se,
        p_value=p,
        sentence=f"{a} and {b} {verdict} within {margin:g} {unit} (p = {say_p(p)}).",
    )


def _impossible(pair: tuple[str, str], table: Mapping[str, FloatArray]) -> TestRow:
    single = [group for group in pair if table[group].size < 2]
    word = "one specimen" if len(single) == 1 else "one specimen each"
    return TestRow(
        quantity="",
        unit="",
        name="no test possible",
        compares=pair,
        difference=_mean(table[pair[0]]) - _mean(table[pair[1]]),
        n=tuple(table[group].size for group in pair),
        possible=False,
        sentence=f"{' and '.join(single)}: {word}. Nothing says how specimens differ, so no test can be made; "
        "measure at least two, better five or more.",
    )


def _finish(row: TestRow, quantity: str, unit: str) -> TestRow:
    """The row with its quantity and a sentence that says what was found."""
    row = replace(row, quantity=quantity, unit=unit)
    p = row.p_adjusted if row.p_adjusted is not None else row.p_value
    if row.sentence or p is None:
        return row
    alpha = 1 - row.level
    if row.difference is None:
        found = "differ" if p < alpha else "are not shown to differ"
        return replace(row, sentence=f"The groups {', '.join(row.compares)} {found} (p = {say_p(p)}).")
    a, b = row.compares
    found = "differ" if p < alpha else "are not shown to differ"
    interval = "" if row.low is None else f" ({row.level:.0%} interval {row.low:+.3g} to {row.high:+.3g} {unit})"
    return replace(
        row, sentence=f"{a} and {b} {found}: {a} - {b} = {row.difference:+.3g} {unit}{interval}, p = {say_p(p)}."
    )


def say_p(p: float) -> str:
    """A p value in words of two digits."""
    return "< 0.0001" if p < 1e-4 else f"{p:.2g}"


def find_drift(
    position: Sequence[float],
    values: Sequence[float],
    *,
    u: Sequence[float | None] | None = None,
    group: str = "",
    quantity: str = "",
    along: str = "position",
    position_unit: str = "",
    level: float = 0.95,
) -> DriftRow:
    """Slope of specimen means against position, with Student's t on n - 2 degrees of freedom.

    Parameters
    ----------
    position, values : (specimens,) sequences of float
        One entry a specimen; at least three different positions are needed for a slope.

    Returns
    -------
    DriftRow
    """
    import numpy as np
    from scipy.special import stdtr, stdtrit

    x, y = np.asarray(position, dtype=float), np.asarray(values, dtype=float)
    points = tuple(
        (float(a), float(b), c) for a, b, c in zip(x, y, u if u is not None else [None] * x.size, strict=True)
    )
    row = DriftRow(
        group=group,
        quantity=quantity,
        along=along,
        position_unit=position_unit,
        slope=None,
        u_slope=None,
        low=None,
        high=None,
        p_value=None,
        points=points,
        sentence=f"Fewer than three positions along the {along}: no slope can be told.",
    )
    if len(set(x.tolist())) < 3:
        return row
    dx = x - x.mean()
    slope = float(dx @ (y - y.mean()) / (dx @ dx))
    residual = (y - y.mean()) - slope * dx
    nu = x.size - 2
    u_slope = math.sqrt(float(residual @ residual) / nu / float(dx @ dx))
    per = f"nm per {position_unit}" if position_unit else "nm per unit"
    half = u_slope * float(stdtrit(nu, 0.5 + level / 2))
    p = float(2 * stdtr(nu, -abs(slope) / u_slope)) if u_slope > 0 else float(slope == 0)
    found = "changes" if p < 1 - level else "is not shown to change"
    return replace(
        row,
        slope=slope,
        u_slope=u_slope,
        low=slope - half,
        high=slope + half,
        p_value=p,
        sentence=f"It {found} along the {along}: {slope:+.3g} {per} "
        f"({level:.0%} interval {slope - half:+.3g} to {slope + half:+.3g}), p = {say_p(p)}.",
    )
