"""Verification of probability forecasts of a yes-or-no event.

Throughout, `p` is an (n,) array of issued probabilities in [0, 1], `y` an (n,) array of outcomes
(0 or 1, or booleans), `weights` an (n,) array of weights not below zero (None: all one; a whole
number counts as so many equal rows), and a mean is the weighted mean.

One rule for what is not defined: a skill, an area or a fitted line needs at least one event and
one non-event of positive weight and raises NumericsError without them.  `bootstrap_by_group`
skips resamples where that happens and counts them.

>>> round(brier_score([0.1, 0.9, 0.8, 0.3], [0, 1, 1, 0]), 12)
0.0375
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from statistics import NormalDist
from typing import NamedTuple

import numpy as np

from forecaster.errors import InputError, NumericsError

_MAX_NEWTON_STEPS = 100
_NEWTON_TOLERANCE = 1e-10  # on the step, in standard deviations of the logit


def _checked(p, y, weights):
    """Probabilities, outcomes and weights of the rows of positive weight, or InputError."""
    p, y = np.asarray(p, float), np.asarray(y, float)
    if p.size and not (p.min() >= 0 and p.max() <= 1):  # NaN fails both
        raise InputError(
            f"probabilities must lie in 0..1, got values from {p.min()!r} to {p.max()!r}"
        )
    if p.ndim != 1 or p.size == 0 or p.shape != y.shape:
        raise InputError(
            "forecasts and outcomes must be rows of one length, not empty, got shapes "
            f"{p.shape} and {y.shape}"
        )
    if not ((y == 0) | (y == 1)).all():
        raise InputError(f"outcomes must be 0 or 1, got {y[(y != 0) & (y != 1)][0]!r}")
    if weights is None:
        return p, y, np.ones(p.size)
    weights = _checked_weights(weights, p.shape)
    if weights.min() == 0:
        keep = weights > 0
        return p[keep], y[keep], weights[keep]
    return p, y, weights


def _checked_weights(weights, shape):
    """Weights of that shape, none negative, at least one positive, or InputError."""
    weights = np.asarray(weights, float)
    if weights.shape != shape:
        raise InputError(f"weights must have the shape {shape}, got {weights.shape}")
    if not (weights.min() >= 0 and 0 < weights.max() < np.inf):
        raise InputError("weights must be finite, none below zero and not all zero")
    return weights


def _base_rate(y, weights, what: str) -> float:
    """Weighted share of events, or NumericsError when all outcomes are the same."""
    rate = float(np.average(y, weights=weights))
    if not 0 < rate < 1:
        kind = "events" if rate == 0 else "non-events"
        raise NumericsError(f"{what} needs at least one event and one non-event, got no {kind}")
    return rate


def _strata(p, y, weights):
    """Distinct issued values in order, with their weight and the weight of their events."""
    order = np.argsort(p, kind="stable")  # adaptive: fast on rows that are already sorted
    p, y, weights = p[order], y[order], weights[order]
    starts = np.flatnonzero(np.concatenate(([True], p[1:] != p[:-1])))
    return p[starts], np.add.reduceat(weights, starts), np.add.reduceat(weights * y, starts)


# --- scores ---


def brier_score(p, y, *, weights=None) -> float:
    """Mean of (p - y)^2, 0 (perfect) .. 1.

    Raises
    ------
    InputError
        For probabilities outside 0..1, outcomes other than 0 and 1, or unequal lengths.

    Notes
    -----
    Source: Brier (1950), Mon. Weather Rev. 78, 1-3, in the form for one event (half of his).

    Examples
    --------
    >>> brier_score([0.5, 0.5], [0, 1])
    0.25
    """
    p, y, weights = _checked(p, y, weights)
    return float(np.average((p - y) ** 2, weights=weights))


def brier_skill(p, y, *, weights=None) -> float:
    """1 - BS / BS(climatology), the climatology being the sample's own share of events.

    1 is perfect, 0 no better than always issuing the share of events, which is itself known only
    afterwards: the score is biased low in small samples (Bradley, Schwartz & Hashino 2008, Weather
    Forecast. 23, 992-1006).

    Raises
    ------
    InputError
        As `brier_score`.
    NumericsError
        Without an event or a non-event.

    Examples
    --------
    >>> brier_skill([0.25, 0.25, 0.25, 0.25], [0, 1, 0, 0])
    0.0
    """
    p, y, weights = _checked(p, y, weights)
    rate = _base_rate(y, weights, "the Brier skill")
    return 1 - float(np.average((p - y) ** 2, weights=weights)) / (rate * (1 - rate))


def logarithmic_score(p, y, *, weights=None) -> float:
    """Mean of -ln(probability given to what happened) [nat], 0 (perfect) .. inf.

    Infinite when something given probability 0 happened.

    Raises
    ------
    InputError
        As `brier_score`.

    Notes
    -----
    Source: Good (1952), J. R. Stat. Soc. B 14, 107-114.

    Examples
    --------
    >>> logarithmic_score([0.0, 1.0], [0, 1]), logarithmic_score([0.0], [1])
    (0.0, inf)
    """
    p, y, weights = _checked(p, y, weights)
    given = np.where(y == 1, p, 1 - p)
    if given.min() == 0:
        return np.inf
    return float(np.average(-np.log(given), weights=weights)) + 0.0


def log_skill(p, y, *, weights=None) -> float:
    """1 - LS / LS(climatology), the climatology being the sample's own share of events.

    1 is perfect, 0 no better than always issuing the share of events, -inf when something given
    probability 0 happened.

    Raises
    ------
    InputError, NumericsError
        As `brier_skill`.

    Notes
    -----
    LS(climatology) is the entropy -r ln r - (1 - r) ln(1 - r) of the share r.  The same quantity
    is known as McFadden's (1974) likelihood-ratio index.

    Examples
    --------
    >>> round(log_skill([0.2, 0.8], [0, 1]), 4)
    0.6781
    """
    p, y, weights = _checked(p, y, weights)
    rate = _base_rate(y, weights, "the logarithmic skill")
    entropy = -rate * np.log(rate) - (1 - rate) * np.log1p(-rate)
    return 1 - logarithmic_score(p, y, weights=weights) / float(entropy)


def mean_bias(p, y, *, weights=None) -> float:
    """Mean probability minus share of events: positive when too much was forecast.

    >>> mean_bias([0.5, 0.75], [0, 1])
    0.125
    """
    p, y, weights = _checked(p, y, weights)
    return float(np.average(p - y, weights=weights))


# --- decompositions ---


class IsotonicParts(NamedTuple):
    """Brier score = miscalibration - discrimination + uncertainty."""

    brier: float
    miscalibration: float
    discrimination: float
    uncertainty: float


def isotonic_decomposition(p, y, *, weights=None) -> IsotonicParts:
    """Miscalibration, discrimination and uncertainty of the Brier score, without bins.

    Raises
    ------
    InputError
        As `brier_score`.

    Notes
    -----
    The forecasts are recalibrated by the non-decreasing function of p that fits the outcomes
    best (`pool_adjacent_violators`).  MCB = BS(issued) - BS(recalibrated), DSC =
    BS(climatology) - BS(recalibrated), UNC = BS(climatology); MCB and DSC are never negative.
    The fit is made on the rows that are scored, so MCB and DSC are biased upward, and again in
    every resample: a bootstrap interval of MCB lies high, even above MCB itself.

    Source: Dimitriadis, Gneiting & Jordan (2021), Proc. Natl. Acad. Sci. 118, e2016191118.

    Examples
    --------
    >>> isotonic_decomposition([0.25, 0.25, 0.75, 0.75], [0, 1, 1, 1])
    IsotonicParts(brier=0.1875, miscalibration=0.0625, discrimination=0.0625, uncertainty=0.1875)
    """
    p, y, weights = _checked(p, y, weights)
    _, weight, events = _strata(p, y, weights)
    fitted = pool_adjacent_violators(events / weight, weights=weight)
    total = weight.sum()
    rate = events.sum() / total
    brier = float(np.average((p - y) ** 2, weights=weights))
    # of calibrated values: sum over w (q - y)^2 = sum over w q (1 - q)
    recalibrated = float(weight @ (fitted * (1 - fitted)) / total)
    uncertainty = float(rate * (1 - rate))
    return IsotonicParts(brier, brier - recalibrated, uncertainty - recalibrated, uncertainty)


def pool_adjacent_violators(values, *, weights=None) -> np.ndarray:
    """The non-decreasing row nearest to `values` in weighted least squares.

    Parameters
    ----------
    values : (n,) array_like
    weights : (n,) array_like, optional
        Positive.

    Returns
    -------
    (n,) array

    Raises
    ------
    InputError
        For values that are not a row of finite numbers, or weights that are not positive.

    Notes
    -----
    Adjacent values that do not increase are replaced by their weighted mean until all increase
    (Ayer et al. 1955, Ann. Math. Stat. 26, 641-647).  Every neighbouring pair out of order ends
    in one block, so all runs of them are merged at once; when a pass merges less than a tenth of
    the blocks, a single sweep with a stack finishes.  Cost grows as n.

    Examples
    --------
    >>> pool_adjacent_violators([1, 0, 1, 0, 1, 1])
    array([0.5, 0.5, 0.5, 0.5, 1. , 1. ])
    """
    means = np.asarray(values, float)
    if means.ndim != 1 or not np.isfinite(means).all():
        raise InputError(f"values must be a row of finite numbers, got shape {means.shape}")
    if means.size == 0:
        return means.copy()
    if weights is None:
        weights = np.ones(means.size)
    weights = _checked_weights(weights, means.shape)
    if weights.min() == 0:
        raise InputError("weights must be positive here, got a zero")
    sizes = np.ones(means.size, int)
    while True:
        starts = np.flatnonzero(np.concatenate(([True], means[1:] > means[:-1])))
        before = means.size
        if starts.size == before:
            return np.repeat(means, sizes)
        pooled = np.add.reduceat(weights, starts)
        means = np.add.reduceat(weights * means, starts) / pooled
        weights, sizes = pooled, np.add.reduceat(sizes, starts)
        if starts.size > 0.9 * before:
            return _sweep(means, weights, sizes)


def _sweep(means, weights, sizes) -> np.ndarray:
    """One pass of pool-adjacent-violators with a stack of blocks."""
    stack: list[tuple[float, float, int]] = []
    for block in zip(means.tolist(), weights.tolist(), sizes.tolist(), strict=True):
        mean, weight, size = block
        while stack and stack[-1][0] >= mean:
            last_mean, last_weight, last_size = stack.pop()
            mean = (last_weight * last_mean + weight * mean) / (last_weight + weight)
            weight += last_weight
            size += last_size
        stack.append((mean, weight, size))
    return np.repeat([mean for mean, _, _ in stack], [size for _, _, size in stack])


# --- calibration ---


class LogitLine(NamedTuple):
    """logit(probability of the event) = intercept + slope * logit."""

    intercept: float
    slope: float


def calibration_line(p, y, *, weights=None) -> LogitLine:
    """Intercept and slope of the outcomes on logit p; (0, 1) for calibrated forecasts.

    A slope below 1 means forecasts that are too sharp, an intercept below 0 (at slope 1) too
    much forecast.

    Raises
    ------
    InputError
        As `brier_score`, and for probabilities of exactly 0 or 1, which have no logit.
    NumericsError
        Without an event or a non-event, when all p are equal, or when the outcomes are separated
        by p (then the likelihood has no maximum).

    Notes
    -----
    Maximum likelihood by Newton's method.  Source: Cox (1958), Biometrika 45, 562-565.

    Examples
    --------
    >>> p = np.repeat([0.2, 0.8], 10)
    >>> y = np.repeat([0, 1, 0, 1], [8, 2, 2, 8])
    >>> intercept, slope = calibration_line(p, y)
    >>> abs(round(intercept, 9)), round(slope, 9)
    (0.0, 1.0)
    """
    p, y, weights = _checked(p, y, weights)
    if p.min() == 0 or p.max() == 1:
        raise InputError("a probability of exactly 0 or 1 has no logit; keep p inside (0, 1)")
    _base_rate(y, weights, "the calibration line")
    logit = np.log(p) - np.log1p(-p)
    _refuse_separated(logit, y)
    return _logistic_fit(logit, y, weights)


def _refuse_separated(logit, y) -> None:
    """NumericsError when a threshold on `logit` divides the outcomes without overlap.

    Then, and only then, a line with intercept has no maximum-likelihood fit (Albert & Anderson
    1984, Biometrika 71, 1-10).
    """
    events, others = logit[y == 1], logit[y == 0]
    divided = events.min() >= others.max() or others.min() >= events.max()
    if divided and logit.min() < logit.max():
        raise NumericsError(
            "the forecasts separate events from non-events, so no line fits best; more rows with "
            "both outcomes at like probabilities are needed"
        )


def _logistic_fit(logit, y, weights) -> LogitLine:
    """Maximum-likelihood line of the outcomes on `logit`, by damped Newton steps."""
    total = weights.sum()
    centre = weights @ logit / total
    scale = np.sqrt(weights @ (logit - centre) ** 2 / total)
    if not scale > 1e-9 * max(1.0, abs(centre)):
        raise NumericsError(f"all forecasts have the same logit {centre:.6g}, so no slope fits")
    z = (logit - centre) / scale
    events, moment = weights @ y, weights @ (y * z)

    def evaluate(a, b):
        eta = a + b * z
        decay = np.exp(-np.abs(eta))
        softplus = np.maximum(eta, 0) + np.log1p(decay)
        return weights @ softplus - a * events - b * moment, a, b, eta, decay

    flat = evaluate(np.log(events / (total - events)), 0.0)
    issued = evaluate(centre, scale)  # intercept 0, slope 1: close if near calibration
    state = min(flat, issued, key=lambda trial: trial[0])
    for _ in range(_MAX_NEWTON_STEPS):
        loss, a, b, eta, decay = state
        residual = weights * (y - np.where(eta >= 0, 1, decay) / (1 + decay))
        curvature = weights * decay / (1 + decay) ** 2
        curved = curvature * z
        h00, h01, h11 = curvature.sum(), curved.sum(), curved @ z
        g0, g1 = residual.sum(), residual @ z
        determinant = h00 * h11 - h01 * h01
        if not determinant > 0:
            break
        step_a, step_b = (h11 * g0 - h01 * g1) / determinant, (h00 * g1 - h01 * g0) / determinant
        for halving in range(60):
            state = evaluate(a + step_a * 0.5**halving, b + step_b * 0.5**halving)
            if state[0] <= loss + 1e-12 * abs(loss):
                break
        moved = max(abs(state[1] - a), abs(state[2] - b))
        if moved < _NEWTON_TOLERANCE * max(1.0, abs(a), abs(b)):
            return _unscaled(state, centre, scale)
    raise NumericsError(
        "the logistic fit did not settle; the forecasts nearly separate events from non-events",
        achieved=_unscaled(state, centre, scale),
    )


def _unscaled(state, centre, scale) -> LogitLine:
    """The line of a Newton state, in terms of the logit itself."""
    _, a, b, *_ = state
    return LogitLine(float(a - b * centre / scale), float(b / scale))


# --- reliability ---


@dataclass(frozen=True, slots=True, eq=False)
class ReliabilityCurve:
    """Observed share of events against issued probability, a row a bin (none empty).

    Parameters
    ----------
    forecast : (m,) array
        Mean issued probability.
    observed : (m,) array
        Share of events.
    observed_low, observed_high : (m,) arrays
        Interval of the share of events (Wilson's).
    consistent_low, consistent_high : (m,) arrays
        Where the share of events would lie if the forecasts were calibrated.
    rows, events : (m,) integer arrays
        Rows of positive weight, and those of them with an event.
    level : float
        Of the intervals.
    """

    forecast: np.ndarray
    observed: np.ndarray
    observed_low: np.ndarray
    observed_high: np.ndarray
    consistent_low: np.ndarray
    consistent_high: np.ndarray
    rows: np.ndarray
    events: np.ndarray
    level: float


def reliability_curve(p, y, *, bins=10, level: float = 0.90, weights=None) -> ReliabilityCurve:
    """Observed share of events in bins of issued probability.

    Parameters
    ----------
    p, y, weights
        As everywhere in this module.
    bins : int or (m + 1,) array_like
        Number of bins holding about equal numbers of rows (equal probabilities stay together),
        or their increasing edges from 0 to 1; a bin holds its lower edge, the last both.
    level : float
        Of the intervals.

    Raises
    ------
    InputError
        As `brier_score`, and for bins or a level that make no sense.

    Notes
    -----
    Interval of the share: Wilson (1927), J. Am. Stat. Assoc. 22, 209-212.  Consistency interval:
    quantiles of the binomial distribution with the bin's mean probability (Broecker & Smith 2007,
    Weather Forecast. 22, 651-661, by formula instead of resampling); probabilities that differ
    within a bin make it a little too wide.  With unequal weights the number of rows is replaced
    by Kish's (sum w)^2 / sum w^2.  **Both take the rows as independent**: rows of one sea are not,
    so the intervals are too narrow there.

    Examples
    --------
    >>> curve = reliability_curve([0.1, 0.1, 0.7, 0.7], [0, 0, 1, 0], bins=[0, 0.5, 1])
    >>> curve.observed.tolist(), curve.rows.tolist()
    ([0.0, 0.5], [2, 2])
    """
    p, y, weights = _checked(p, y, weights)
    if not 0 < level < 1:
        raise InputError(f"level must lie between 0 and 1, got {level!r}")
    index = _bin_index(p, bins)
    used, index = np.unique(index, return_inverse=True)
    count = used.size
    weight = np.bincount(index, weights, count)
    forecast = np.bincount(index, weights * p, count) / weight
    observed = np.bincount(index, weights * y, count) / weight
    effective = weight**2 / np.bincount(index, weights**2, count)
    z = NormalDist().inv_cdf(0.5 + level / 2)
    middle = (observed + z**2 / (2 * effective)) / (1 + z**2 / effective)
    half = (
        z
        * np.sqrt(observed * (1 - observed) / effective + z**2 / (4 * effective**2))
        / (1 + z**2 / effective)
    )
    consistent = np.array(
        [
            _binomial_interval(round(n), min(max(mean, 0.0), 1.0), level)
            for n, mean in zip(effective.tolist(), forecast.tolist(), strict=True)
        ]
    )
    return ReliabilityCurve(
        forecast=forecast,
        observed=observed,
        observed_low=np.clip(middle - half, 0, observed),
        observed_high=np.clip(middle + half, observed, 1),
        consistent_low=consistent[:, 0],
        consistent_high=consistent[:, 1],
        rows=np.bincount(index, minlength=count),
        events=np.bincount(index, y, count).astype(int),
        level=level,
    )


def _bin_index(p, bins) -> np.ndarray:
    """Bin number of each probability."""
    if np.ndim(bins) == 0:
        if bins != int(bins) or bins < 1:
            raise InputError(f"the number of bins must be a whole number above 0, got {bins!r}")
        _, index, rows = np.unique(p, return_inverse=True, return_counts=True)
        middle_rank = np.cumsum(rows) - 0.5 * rows
        return (int(bins) * middle_rank / p.size).astype(int)[index]
    edges = np.asarray(bins, float)
    if edges.ndim != 1 or edges.size < 2 or edges[0] != 0 or edges[-1] != 1:
        raise InputError(f"edges of bins must run from 0 to 1, got {bins!r}")
    if not (np.diff(edges) > 0).all():
        raise InputError(f"edges of bins must increase, got {bins!r}")
    return np.searchsorted(edges[1:-1], p, side="right")


def _binomial_interval(n: int, p: float, level: float) -> tuple[float, float]:
    """Quantiles (1 -+ level)/2 of a binomial(n, p) number, over n."""
    if p in (0.0, 1.0):
        return p, p
    k = np.arange(n)
    log_ratio = np.log((n - k) / (k + 1)) + np.log(p) - np.log1p(-p)
    log_mass = n * np.log1p(-p) + np.concatenate(([0.0], np.cumsum(log_ratio)))
    cumulative = np.cumsum(np.exp(log_mass))
    tails = np.array([0.5 - level / 2, 0.5 + level / 2]) * cumulative[-1]
    low, high = np.searchsorted(cumulative, tails * (1 - 1e-12))
    return float(low) / n, float(high) / n


# --- discrimination ---


def roc_area(p, y, *, weights=None) -> float:
    """Probability that an event was given more than a non-event, ties counting half.

    0.5 is no discrimination, 1 perfect.

    Raises
    ------
    InputError, NumericsError
        As `brier_skill`.

    Notes
    -----
    The area under the relative operating characteristic equals the Mann-Whitney statistic over
    (number of events x number of non-events).  Source: Mason & Graham (2002), Q. J. R. Meteorol.
    Soc. 128, 2145-2166.

    Examples
    --------
    >>> roc_area([0.1, 0.4, 0.4, 0.8], [0, 0, 1, 1])
    0.875
    """
    p, y, weights = _checked(p, y, weights)
    _base_rate(y, weights, "the ROC area")
    _, weight, events = _strata(p, y, weights)
    others = weight - events
    below = np.cumsum(others) - 0.5 * others
    return float(events @ below / (events.sum() * others.sum()))


def precision_recall_area(p, y, *, weights=None) -> float:
    """Area under precision over recall, as a sum of steps; the base rate without discrimination.

    Raises
    ------
    InputError, NumericsError
        As `brier_skill`.

    Notes
    -----
    Sum over thresholds, from the highest probability down, of (recall gained) x precision, known
    as average precision.  Straight lines between the points would be too high (Davis & Goadrich
    2006, Proc. 23rd Int. Conf. Machine Learning, 233-240).

    Examples
    --------
    >>> round(precision_recall_area([0.1, 0.4, 0.35, 0.8], [0, 0, 1, 1]), 6)
    0.833333
    """
    p, y, weights = _checked(p, y, weights)
    _base_rate(y, weights, "the precision-recall area")
    _, weight, events = _strata(p, y, weights)
    precision = np.cumsum(events[::-1]) / np.cumsum(weight[::-1])
    return float(events[::-1] @ precision / events.sum())


# --- uncertainty of the scores ---


class ScoreInterval(NamedTuple):
    """A score on all rows, and its interval over resampled groups.

    `replicates` resamples went into the interval; `skipped` had no defined score.
    """

    value: float
    low: float
    high: float
    replicates: int
    skipped: int


def bootstrap_by_group(
    score_functions: Mapping[str, Callable],
    p,
    y,
    groups,
    *,
    generator: np.random.Generator,
    replicates: int = 1000,
    level: float = 0.90,
) -> dict[str, ScoreInterval]:
    """Scores with intervals from resampling whole groups.

    Parameters
    ----------
    score_functions : mapping of name to function
        Called as ``function(p, y, weights=weights)``.  A function that returns a named tuple
        gives one entry a field, named ``name.field``.
    p, y
        As everywhere in this module.
    groups : (n,) array_like
        Which rows belong together (the sea of each row); at least two.
    generator : numpy.random.Generator
    replicates : int
    level : float
        Of the intervals.

    Raises
    ------
    InputError
        As `brier_score`, and for fewer than two groups.
    NumericsError
        When a score is not defined on all rows, or on no resample.

    Notes
    -----
    Each resample draws as many groups as there are, with replacement; a group drawn m times
    counts as weight m on its rows, so no row is copied, and the rows are sorted once.  The limits
    are order statistics of the resampled scores (percentile interval: Efron 1979, Ann. Stat. 7,
    1-26; whole groups: Davison & Hinkley 1997, sec. 3.8).  Too narrow for fewer than about 30
    groups, and when many resamples are skipped.

    Examples
    --------
    >>> p, y, sea = [0.2, 0.3, 0.6, 0.9], [0, 1, 0, 1], [1, 1, 2, 2]
    >>> generator = np.random.default_rng(5)
    >>> result = bootstrap_by_group({"brier": brier_score}, p, y, sea, generator=generator)
    >>> round(result["brier"].value, 6), result["brier"].replicates
    (0.225, 1000)
    """
    p, y, _ = _checked(p, y, None)
    full = {name: _named(name, score(p, y)) for name, score in score_functions.items()}
    draws, index = _group_draws(groups, p.size, replicates, generator)
    order = np.argsort(p, kind="stable")
    p, y, index = p[order], y[order], index[order]
    resampled = {key: [] for values in full.values() for key in values}
    for draw in draws:
        weights = draw[index]
        keep = weights > 0
        some_p, some_y, some_weights = p[keep], y[keep], weights[keep]
        for name, score in score_functions.items():
            try:
                result = score(some_p, some_y, weights=some_weights)
            except NumericsError:
                continue
            for key, value in _named(name, result).items():
                resampled[key].append(value)
    return {
        key: _interval(key, value, resampled[key], replicates, level)
        for values in full.values()
        for key, value in values.items()
    }


def bootstrap_difference(
    score: Callable,
    p_a,
    p_b,
    y,
    groups,
    *,
    generator: np.random.Generator,
    replicates: int = 1000,
    level: float = 0.90,
) -> ScoreInterval:
    """Score of forecasts `p_a` minus that of `p_b`, with an interval by resampling whole groups.

    Both are scored on the same resamples, so what they share cancels.

    Parameters
    ----------
    score : function
        Called as ``score(p, y, weights=weights)``; returns a number.
    p_a, p_b : (n,) array_like
        Two forecasts of the same rows.
    y, groups, generator, replicates, level
        As `bootstrap_by_group`.

    Raises
    ------
    InputError, NumericsError
        As `bootstrap_by_group`.

    Examples
    --------
    >>> y, sea = [0, 1, 0, 1], [1, 1, 2, 2]
    >>> generator = np.random.default_rng(5)
    >>> gain = bootstrap_difference(
    ...     brier_score, [0.2, 0.8, 0.1, 0.9], [0.5] * 4, y, sea, generator=generator
    ... )
    >>> round(gain.value, 6), gain.low < gain.high < 0
    (-0.225, True)
    """
    p_a, y, _ = _checked(p_a, y, None)
    p_b, y, _ = _checked(p_b, y, None)
    value = score(p_a, y) - score(p_b, y)
    draws, index = _group_draws(groups, y.size, replicates, generator)
    sorted_forecasts = []
    for p in (p_a, p_b):
        order = np.argsort(p, kind="stable")
        sorted_forecasts.append((p[order], y[order], index[order]))
    differences = []
    for draw in draws:
        try:
            first, second = (
                score(p, outcomes, weights=draw[rows]) for p, outcomes, rows in sorted_forecasts
            )
        except NumericsError:
            continue
        differences.append(first - second)
    return _interval("the difference", value, differences, replicates, level)


def _group_draws(groups, n, replicates, generator):
    """(replicates, groups) numbers of times each group is drawn; (n,) group number of each row."""
    groups = np.asarray(groups)
    if groups.shape != (n,):
        raise InputError(f"groups must have the shape {(n,)}, got {groups.shape}")
    if replicates < 1:
        raise InputError(f"replicates must be at least 1, got {replicates!r}")
    names, index = np.unique(groups, return_inverse=True)
    if names.size < 2:
        raise InputError(f"at least two groups are needed to resample them, got {names.size}")
    draws = generator.multinomial(names.size, np.full(names.size, 1 / names.size), replicates)
    return draws.astype(float), index


def _named(name: str, result) -> dict[str, float]:
    """A score's result by name: one entry, or one a field of a named tuple."""
    if isinstance(result, tuple):
        return {f"{name}.{field}": value for field, value in result._asdict().items()}
    return {name: result}


def _interval(name, value, resampled, replicates, level) -> ScoreInterval:
    """Percentile interval by order statistics, which infinite scores do not upset."""
    if not 0 < level < 1:
        raise InputError(f"level must lie between 0 and 1, got {level!r}")
    if not resampled:
        raise NumericsError(f"{name} is not defined on any of {replicates} resamples")
    ordered = np.sort(resampled)
    last = ordered.size - 1
    low, high = (ordered[round(share * last)] for share in (0.5 - level / 2, 0.5 + level / 2))
    return ScoreInterval(
        float(value), float(low), float(high), ordered.size, replicates - ordered.size
    )
