"""Fitting: datasets -> bags of monotone boosted trees -> calibration on other seas -> Model."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.special import expit

from forecaster.datatypes import ModelIdentity
from forecaster.errors import InputError, NumericsError
from forecaster.learning.dataset import Dataset
from forecaster.learning.events import EXTREME_HEIGHT, HORIZON_COVERAGE
from forecaster.learning.model import (
    CRITERIA,
    MARGINS,
    Head,
    Model,
    Trees,
    line_slopes,
    line_terms,
    monotone_signs,
    threshold_columns,
)
from forecaster.settings import TrainSettings

CALIBRATION_RATIOS = {"height": (1.0, 1.2, 1.4, 1.6, 1.8, 2.0, 2.2), "crest": (0.7, 0.9, 1.1, 1.25)}
ROUNDING = 1e-5  # in log odds, of leaves in single precision
_BINS = 200
_NEWTON_STEPS = 40
_SPLIT, _BAG = range(2)  # purposes of random numbers


def split_seas(dataset: Dataset, settings: TrainSettings) -> tuple[np.ndarray, np.ndarray]:
    """Seas to fit on and seas to calibrate on: every record of a sea falls on one side."""
    seas = np.unique(dataset.sea)
    generator = np.random.default_rng([settings.root_seed, _SPLIT])
    shuffled = generator.permutation(seas)
    kept = round(settings.calibration_share * seas.size)
    if kept < 2 or seas.size - kept < 2:
        raise InputError(
            f"{seas.size} seas are too few to fit and calibrate on; at least 8 are needed"
        )
    return np.sort(shuffled[kept:]), np.sort(shuffled[:kept])


def draw_thresholds(dataset: Dataset, criterion: str, number: int, generator) -> np.ndarray:
    """(rows, number) thresholds at which rows are shown to the trees.

    One uniform over the criterion's range, one in its upper part, the others about the run's own
    forecast, where the answer is open.  They depend on features only, never on outcomes.
    """
    low, high = CRITERIA[criterion]
    rows = len(dataset.features)
    drawn = generator.uniform(low, high, (rows, number))
    if number > 1:
        drawn[:, 1] = generator.uniform(low + 0.3 * (high - low), low + 0.8 * (high - low), rows)
    if number > 2:
        run = dataset.column(next(iter(MARGINS[criterion])))[:, None]
        width = 0.12 * (high - low)
        near = run + width * generator.standard_normal((rows, number - 2))
        drawn[:, 2:] = np.where((near > low) & (near < high), near, drawn[:, 2:])
    return drawn.astype(np.float32)


def _flattened(booster) -> Trees:
    """Trees of a fitted scikit-learn booster as flat arrays of single precision.

    A threshold is rounded down, so that every column of single precision goes the same way.
    """
    parts = {name: [] for name in ("feature", "left", "right", "threshold", "value")}
    roots, offset, depth = [], 0, 1
    for (predictor,) in booster._predictors:
        nodes = predictor.nodes
        leaf = nodes["is_leaf"].astype(bool)
        own = np.arange(nodes.size)
        parts["feature"].append(np.where(leaf, 0, nodes["feature_idx"]))
        parts["left"].append(np.where(leaf, own, nodes["left"]) + offset)
        parts["right"].append(np.where(leaf, own, nodes["right"]) + offset)
        limit = np.where(leaf, np.inf, nodes["num_threshold"])
        single = limit.astype(np.float32)
        above = single > limit
        single[above] = np.nextafter(single[above], np.float32(-np.inf))
        parts["threshold"].append(single)
        parts["value"].append(np.where(leaf, nodes["value"], 0.0).astype(np.float32))
        roots.append(offset)
        offset += nodes.size
        depth = max(depth, int(nodes["depth"].max()))
    base = float(np.ravel(booster._baseline_prediction)[0])
    arrays = {name: np.concatenate(rows) for name, rows in parts.items()}
    return Trees(base=base, roots=np.array(roots), depth=depth, **arrays)


def _fit_bag(dataset, names, criterion, settings, bag) -> Trees:
    from sklearn.ensemble import HistGradientBoostingClassifier
    from threadpoolctl import threadpool_limits

    generator = np.random.default_rng([settings.root_seed, _BAG, bag, len(criterion)])
    seas = np.unique(dataset.sea)
    chosen = generator.choice(seas, max(round(settings.bag_share * seas.size), 1), replace=False)
    wanted = np.isin(dataset.sea, chosen)
    # where the run knows nothing all rows are alike: a share of them teaches the same
    known = dataset.column("coverage") > settings.uncovered_below
    wanted &= known | (generator.uniform(size=known.size) < settings.uncovered_share)
    rows = np.flatnonzero(wanted)
    most = settings.rows_per_bag // settings.thresholds_per_interval
    if rows.size > most:
        rows = generator.choice(rows, most, replace=False)
    part = dataset.rows(rows)
    ratios = draw_thresholds(part, criterion, settings.thresholds_per_interval, generator)
    number = ratios.shape[1]
    used = [part.names.index(name) for name in names]
    table = np.repeat(part.features[:, used], number, axis=0)
    columns = threshold_columns(table, names, criterion, ratios.ravel())
    reached = (getattr(part, criterion)[:, None] >= ratios).ravel()
    booster = HistGradientBoostingClassifier(
        max_iter=settings.boosting_rounds,
        learning_rate=settings.learning_rate,
        max_leaf_nodes=settings.leaves,
        min_samples_leaf=settings.samples_per_leaf,
        max_bins=_BINS,
        monotonic_cst=monotone_signs(names, criterion),
        early_stopping=False,
        random_state=int(generator.integers(2**31)),
    )
    with threadpool_limits(1):
        booster.fit(columns, reached)
        trees = _flattened(booster)
        probe = columns[:: max(len(columns) // 500, 1)]
        difference = np.abs(trees.log_odds(probe) - booster.decision_function(probe)).max()
    if not difference < ROUNDING:
        raise NumericsError(
            f"the flattened trees differ from the fitted ones by {difference:g} in log odds",
            achieved=difference,
        )
    return trees


def _bag_log_odds(trees, table, names, criterion, ratios):
    """(rows, k) log odds of one bag, one threshold at a time to bound memory."""
    number = len(table)
    return np.stack(
        [
            trees.log_odds(threshold_columns(table, names, criterion, np.full(number, ratio)))
            for ratio in ratios
        ],
        axis=1,
    )


def shown_rows(dataset: Dataset) -> np.ndarray:
    """Mask of rows that a forecast would show: covered, or at the sensor itself."""
    return (dataset.column("coverage") >= HORIZON_COVERAGE) | (
        dataset.column("distance_wavelengths") == 0
    )


def _calibrated_line(log_odds, coverage, reached, sea):
    """Calibration line of (rows, k) log odds and its covariance, seas being independent.

    Maximum likelihood by Newton's method; covariance H^-1 (sum over seas of s s') H^-1, H the
    information and s a sea's score (the sandwich of Huber 1967, Proc. 5th Berkeley Symp. 1, 221).
    """
    number = log_odds.shape[1]
    terms = line_terms(log_odds.ravel(), np.repeat(coverage, number))
    y = reached.ravel().astype(float)
    line = np.array([0.0, 1.0, 0.0, 0.0])
    for _ in range(_NEWTON_STEPS):
        p = expit(terms @ line)
        information = (terms * (p * (1 - p))[:, None]).T @ terms
        step = np.linalg.lstsq(information, terms.T @ (y - p), rcond=None)[0]
        line = line + step
        if np.abs(step).max() < 1e-9:
            break
    else:
        raise NumericsError(
            f"the calibration line did not settle in {_NEWTON_STEPS} steps (last change "
            f"{np.abs(step).max():.2g}); more seas with events are needed",
            achieved=line,
        )
    if not line_slopes(line).min() > 0:
        raise NumericsError(
            f"the calibration line falls with the trees' log odds (slopes {line_slopes(line)}): "
            "they have learnt nothing that holds on other seas",
            achieved=line,
        )
    seas, place = np.unique(sea, return_inverse=True)
    scores = np.zeros((seas.size, 4))
    np.add.at(scores, np.repeat(place, number), terms * (y - p)[:, None])
    inverse = np.linalg.pinv(information)
    return line, inverse @ (scores.T @ scores) @ inverse


def horizon_groups(dataset: Dataset) -> tuple[np.ndarray, np.ndarray]:
    """(rows kept, number of the horizon each belongs to): one horizon a (record, distance)."""
    kept = np.flatnonzero(shown_rows(dataset))
    key = np.stack(
        [
            dataset.sea[kept].astype(np.int64),
            dataset.record[kept].astype(np.int64),
            np.rint(100 * dataset.column("distance_wavelengths")[kept]).astype(np.int64),
        ]
    )
    _, group = np.unique(key, axis=1, return_inverse=True)
    return kept, group.ravel()


def _fit_horizon(probability, reached, group) -> np.ndarray:
    """c0, c1 of the horizon's link by maximum likelihood (see `Head.horizon`)."""
    from scipy.optimize import minimize

    count = group.max() + 1
    hazard = -np.log1p(-np.clip(probability, 1e-12, 1 - 1e-9))
    total = np.stack([np.bincount(group, column, count) for column in hazard.T], axis=1)
    happened = np.stack([np.bincount(group, column, count) for column in reached.T], axis=1) > 0
    x = np.log(total)

    def loss(c):
        joint = np.exp(np.clip(c[0] + c[1] * x, -30, 6))
        return np.where(happened, -np.log(-np.expm1(-joint)), joint).mean()

    found = minimize(loss, np.array([0.0, 1.0]), method="Nelder-Mead")
    if not found.x[1] > 0:
        raise NumericsError(
            f"the horizon's link falls with the intervals' probabilities (slope {found.x[1]:g})",
            achieved=found.x,
        )
    return found.x


def taught_on(recipes: list[str], dataset: Dataset, settings: TrainSettings) -> dict:
    """What a model was fitted and calibrated on, in numbers for its card."""
    counts = {"recipes": recipes, "rows": len(dataset.height)}
    for label, seas in zip(("fitted", "calibrated"), split_seas(dataset, settings), strict=True):
        inside = np.isin(dataset.sea, seas)
        counts[f"{label}_seas"] = int(seas.size)
        counts[f"{label}_records"] = int(
            np.unique(np.stack([dataset.sea[inside], dataset.record[inside]]), axis=1).shape[1]
        )
        reached = inside & (dataset.height >= EXTREME_HEIGHT)
        counts[f"{label}_intervals_with_extreme_wave"] = int(reached.sum())
    return counts


def fit_head(
    fitted: Dataset, held: Dataset, criterion: str, settings: TrainSettings,
    *, names: tuple[str, ...], workers: int = 1,
    progress: Callable[[str], None] = lambda message: None,
) -> Head:  # fmt: skip
    """One criterion: bags on `fitted`, calibration on `held`; no sea is in both."""
    import joblib

    progress(f"{criterion}: {settings.bags} bags on {np.unique(fitted.sea).size} seas")
    with joblib.parallel_config(backend="loky", inner_max_num_threads=1):
        bags = joblib.Parallel(n_jobs=workers)(
            joblib.delayed(_fit_bag)(fitted, names, criterion, settings, bag)
            for bag in range(settings.bags)
        )
    kept, group = horizon_groups(held)
    shown = held.rows(kept)
    ratios = CALIBRATION_RATIOS[criterion]
    progress(f"{criterion}: calibration on {np.unique(held.sea).size} seas")
    table = shown.features[:, [shown.names.index(name) for name in names]]
    with joblib.parallel_config(backend="loky", inner_max_num_threads=1):
        told = joblib.Parallel(n_jobs=workers)(
            joblib.delayed(_bag_log_odds)(trees, table, names, criterion, ratios) for trees in bags
        )
    log_odds = np.mean(told, axis=0)
    reached = getattr(shown, criterion)[:, None] >= np.array(ratios)
    coverage = shown.column("coverage")
    line, covariance = _calibrated_line(log_odds, coverage, reached, shown.sea)
    terms = line_terms(log_odds, np.broadcast_to(coverage[:, None], log_odds.shape))
    probability = expit(terms @ line)
    horizon = _fit_horizon(probability, reached, group)
    return Head(names, tuple(bags), line, covariance, horizon)


def fit(
    dataset: Dataset,
    settings: TrainSettings,
    *,
    name: str,
    version: str,
    names: tuple[str, ...] | None = None,
    criteria: tuple[str, ...] = tuple(CRITERIA),
    workers: int = 1,
    progress: Callable[[str], None] = lambda message: None,
) -> Model:
    """Fit and calibrate a model.

    Parameters
    ----------
    dataset : Dataset
        At least 8 seas.
    settings : TrainSettings
    name, version : str
    names : tuple of str or None
        Features to use; None for all of the dataset's (an ablation passes fewer).
    criteria : tuple of str
    workers : int
        Processes; the model is the same whatever their number.
    progress : callable
        Told what is being done.
    """
    fit_on, calibrate_on = split_seas(dataset, settings)
    fitted = dataset.rows(np.isin(dataset.sea, fit_on))
    held = dataset.rows(np.isin(dataset.sea, calibrate_on))
    names = dataset.names if names is None else names
    heads = {
        criterion: fit_head(
            fitted, held, criterion, settings, names=names, workers=workers, progress=progress
        )
        for criterion in criteria
    }
    quantiles = np.quantile(fitted.features, (0.002, 0.998), axis=0)
    ranges = {
        feature: (float(low), float(high))
        for feature, low, high in zip(dataset.names, *quantiles, strict=True)
    }
    # a distance in the record's own wavelengths scatters with its kp; what was taught does not
    ranges["distance_wavelengths"] = (float(fitted.distance.min()), float(fitted.distance.max()))
    return Model(ModelIdentity(name, version, ""), heads, ranges)
