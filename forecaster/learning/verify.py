"""Verification: how good the probabilities are on seas that were never trained on.

Tables print seas, seas with events, intervals and events beside each score; intervals of a score
come from resampling whole seas.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from forecaster.learning.dataset import PLAIN_NAMES, Dataset
from forecaster.learning.events import HORIZON_COVERAGE
from forecaster.learning.features import WAVES_PER_INTERVAL
from forecaster.learning.model import Model
from forecaster.learning.scores import (
    bootstrap_by_group,
    bootstrap_difference,
    brier_skill,
    calibration_line,
    isotonic_decomposition,
    log_skill,
    logarithmic_score,
    mean_bias,
    pool_adjacent_violators,
    precision_recall_area,
    reliability_curve,
    roc_area,
)
from forecaster.learning.train import fit, horizon_groups, shown_rows
from forecaster.settings import TrainSettings
from forecaster.waves.heights import (
    excess_kurtosis_from_bfi,
    largest_exceedance,
    mori_janssen_height_exceedance,
    predictive_base_rate,
)

REPLICATES = 400
MIN_EVENTS_FOR_LINE = 200
BARELY = 0.2  # coverage below which next to nothing is known
COVERAGE_BANDS = (0.5, 0.8, 0.95, 1.0)
RELIABILITY_EDGES = np.array([0, 0.002, 0.01, 0.05, 0.1, 0.2, 0.4, 0.6, 0.8, 1.0])
FLOOR = 1e-6  # of a baseline's probability, so that one surprise is not an infinite score
FEATURE_SETS = {
    "statistics": (
        "steepness", "bfi", "bandwidth", "peakedness", "hs_error", "skewness", "excess_kurtosis",
        "groupiness", "noise_share", "record_periods", "samples_per_period", "largest_height",
        "distance_wavelengths", "lead_periods", "coverage", "least_coverage",
    ),
    "scattering": (
        "group_eigenvalue", "group_speed_offset", "group_eigenvalue_sum", "group_soliton_share",
        "group_chirp", "group_focus_nearness", "group_amplification", "record_eigenvalue",
        "record_soliton_share", "unstable_modes", "open_bands", "widest_band", "arriving_soliton",
        "arriving_short", "arriving_short_largest", "arriving_short_before",
        "arriving_short_after", "arriving_long", "arriving_long_largest", "arriving_long_before",
        "arriving_long_after",
    ),
    "forward run": (
        "unexplained", "run_height", "run_crest", "run_envelope", "run_height_wide",
        "run_crest_wide", "run_second_height", "run_height_before", "run_height_after",
        "full_height", "full_crest", "full_envelope", "linear_height", "linear_envelope",
        "fed_envelope", "reach_50", "reach_10", "reach_1",
    ),
    "plain run": PLAIN_NAMES,  # a baseline's, not in the feature table
}  # fmt: skip
ABLATIONS = {
    "BFI and statistics": ("statistics",),
    "+ scattering": ("statistics", "scattering"),
    "+ forward run": ("statistics", "forward run"),
    "all": ("statistics", "scattering", "forward run"),
}
PLAIN_ABLATIONS = {  # beside a plain Dysthe run in place of the forward run
    "+ Dysthe run": ("statistics", "plain run"),
    "+ Dysthe, scattering": ("statistics", "plain run", "scattering"),
}
GAINS = (
    ("BFI and statistics", "+ scattering"),
    ("+ Dysthe run", "+ Dysthe, scattering"),
    ("+ forward run", "all"),
)


@dataclass(frozen=True, slots=True)
class Row:
    """One line of a table: what was scored, on how much, and scores with by-sea intervals.

    `scores` maps a name to (value, low, high); a score that too few events allow is absent.
    """

    label: str
    seas: int
    seas_with_events: int
    cases: int
    events: int
    scores: dict[str, tuple[float, float, float]]


def forecast_rows(dataset: Dataset) -> Dataset:
    """The intervals a forecast would show: half measured, or at the sensor itself."""
    return dataset.rows(shown_rows(dataset))


def barely_measured_rows(dataset: Dataset) -> Dataset:
    """Downwave intervals beyond those that a forecast would show, some of whose waves are known."""
    coverage = dataset.column("coverage")
    downwave = dataset.column("distance_wavelengths") > 0
    return dataset.rows(downwave & (coverage >= BARELY) & (coverage < HORIZON_COVERAGE))


def score_row(label: str, p, y, sea, *, generator, replicates=REPLICATES) -> Row:
    """Scores of one set of cases; intervals from resampled seas."""
    p, y = np.clip(np.asarray(p, float), FLOOR, 1 - FLOOR), np.asarray(y, bool)
    events = int(y.sum())
    with_events = int(np.unique(sea[y]).size)
    scores: dict[str, tuple[float, float, float]] = {}
    functions = {"log skill": log_skill, "Brier skill": brier_skill, "ROC": roc_area,
                 "mean bias": mean_bias}  # fmt: skip
    if events >= MIN_EVENTS_FOR_LINE:
        functions["line"] = calibration_line
    if 0 < events < y.size and with_events > 1:
        found = bootstrap_by_group(functions, p, y, sea, generator=generator, replicates=replicates)
        scores = {name: (s.value, s.low, s.high) for name, s in found.items()}
    return Row(label, int(np.unique(sea).size), with_events, int(y.size), events, scores)


def model_table(model: Model, dataset: Dataset, ratio: float, *, generator) -> list[Row]:
    """Scores of a model at one height ratio: pooled, and by distance, steepness and coverage."""
    shown = forecast_rows(dataset)
    p = model.intervals(shown.features, shown.names, [ratio]).probability[:, 0]
    y = shown.height >= ratio
    rows = [score_row("pooled", p, y, shown.sea, generator=generator)]
    groups = [
        *((f"{d:g} wavelengths", shown.distance == d) for d in np.unique(shown.distance)),
        *_bands("steepness", shown.true_steepness, (0.04, 0.07, 0.10, 0.14)),
        *_bands("coverage", shown.column("coverage"), COVERAGE_BANDS),
    ]
    for label, mask in groups:
        if mask.any():
            rows.append(score_row(label, p[mask], y[mask], shown.sea[mask], generator=generator))
    return rows


def _bands(name, values, edges):
    last = len(edges) - 2
    for i, (low, high) in enumerate(pairwise(edges)):
        upper = values <= high + 1e-6 if i == last else values < high
        yield f"{name} {low:g}-{high:g}", (values >= low) & upper


def horizon_table(model: Model, dataset: Dataset, ratio: float, *, generator) -> list[Row]:
    """Scores of horizon probabilities: one case a (record, distance)."""
    kept, group = horizon_groups(dataset)
    shown = dataset.rows(kept)
    inner = model.intervals(shown.features, shown.names, [ratio])
    order = np.argsort(group, kind="stable")
    starts = np.flatnonzero(np.r_[True, np.diff(group[order]) > 0])
    p, y, sea, distance = [], [], [], []
    for members in np.split(order, starts[1:]):
        part = type(inner)(inner.probability[members], inner.error[members])
        p.append(model.horizon(part).probability[0, 0])
        y.append(bool((shown.height[members] >= ratio).any()))
        sea.append(shown.sea[members[0]])
        distance.append(shown.distance[members[0]])
    p, y, sea, distance = (np.array(v) for v in (p, y, sea, distance))
    rows = [score_row("pooled", p, y, sea, generator=generator)]
    for d in np.unique(distance):
        mask = distance == d
        rows.append(
            score_row(f"{d:g} wavelengths", p[mask], y[mask], sea[mask], generator=generator)
        )
    return rows


def monotone_calibration(x, y) -> Callable[[np.ndarray], np.ndarray]:
    """One variable turned into a probability by isotonic regression (both ends held)."""
    order = np.argsort(x, kind="stable")
    fitted = pool_adjacent_violators(np.asarray(y, float)[order])
    places, index = np.unique(np.asarray(x, float)[order], return_index=True)
    last = np.r_[index[1:], fitted.size] - 1
    values = np.clip(0.5 * (fitted[index] + fitted[last]), FLOOR, 1 - FLOOR)
    return lambda new: np.interp(new, places, values)


def _base_rate_score(data, ratio):
    return predictive_base_rate(ratio, WAVES_PER_INTERVAL, data.column("hs_error").astype(float))


def _mori_janssen_score(data, ratio):
    kappa = excess_kurtosis_from_bfi(data.column("bfi").astype(float))
    return largest_exceedance(mori_janssen_height_exceedance(ratio, kappa), WAVES_PER_INTERVAL)


def baselines(taught: Dataset, dataset: Dataset, ratio: float) -> dict[str, np.ndarray]:
    """Probability of each baseline for the rows of `dataset`, calibrated on `taught`.

    Both hold forecast rows only.  One-variable monotone calibration, except the logistic line.
    """
    y = taught.height >= ratio
    one_variable = {
        "predictive base rate": _base_rate_score,
        "Mori-Janssen with BFI": _mori_janssen_score,
        "linear forward run": lambda data, ratio: data.column("linear_height"),
    }
    found = {"climatology": np.full(len(dataset.height), y.mean())}
    for name, variable in one_variable.items():
        calibrated = monotone_calibration(variable(taught, ratio), y)
        found[name] = calibrated(variable(dataset, ratio))
    found["kurtosis and largest wave"] = _logistic(taught, dataset, y)
    run, plain = PLAIN_NAMES.index("plain_height"), knows_plain_run(taught)
    if plain.any() and knows_plain_run(dataset).all():
        calibrated = monotone_calibration(taught.plain_run[plain, run], y[plain])
        found["Dysthe forward run"] = calibrated(dataset.plain_run[:, run])
    return found


def _logistic(taught, dataset, y):
    from sklearn.linear_model import LogisticRegression

    names = ("excess_kurtosis", "largest_height")
    teach, ask = (np.stack([d.column(n) for n in names], axis=1) for d in (taught, dataset))
    return LogisticRegression(C=1e6).fit(teach, y).predict_proba(ask)[:, 1]


def baseline_table(model, taught, dataset, ratio, *, generator) -> list[dict]:
    """Each baseline's log skill, and the model's gain in mean log score with its interval.

    Parameters
    ----------
    taught : Dataset
        The training seas, with the plain Dysthe run where it was computed.
    dataset : Dataset
        The verification seas.
    """
    shown, teach = forecast_rows(dataset), forecast_rows(taught)
    y = shown.height >= ratio
    p = np.clip(
        model.intervals(shown.features, shown.names, [ratio]).probability[:, 0], FLOOR, 1 - FLOOR
    )
    table = []
    for name, q in baselines(teach, shown, ratio).items():
        q = np.clip(q, FLOOR, 1 - FLOOR)
        table.append(
            {
                "baseline": name,
                "log_skill": float(log_skill(q, y)),
                "roc": float(roc_area(q, y)),
                **_gain(q, p, y, shown.sea, generator),
            }
        )
    return table


def ablation(
    taught: Dataset, cases: dict[str, Dataset], settings: TrainSettings, ratio: float, *,
    generator, workers: int = 1, progress: Callable[[str], None] = lambda message: None,
) -> dict:  # fmt: skip
    """What each kind of feature adds: one model of two bags per set, fitted and scored alike.

    Parameters
    ----------
    taught : Dataset
        The training seas.
    cases : dict of str to Dataset
        Rows to score.
    settings, ratio, generator, workers, progress
        As for `verify`.

    Returns
    -------
    dict
        For each of `cases`: ``sets``, scores of each set of features, pooled, by distance and by
        coverage; ``gains``, gain in mean log score from one set to another, with its by-sea
        interval.  Beside a plain Dysthe run, models are taught on the rows that have one.
    """
    told = {place: {} for place in cases}
    plain = {
        place: _with_plain_run(rows) for place, rows in cases.items() if knows_plain_run(rows).all()
    }
    rounds = [(ABLATIONS, taught, cases)]
    if plain:
        rounds.append((PLAIN_ABLATIONS, _with_plain_run(taught), plain))
    for ablations, teach, asked in rounds:
        for label, parts in ablations.items():
            progress(f"ablation: {label}")
            names = tuple(name for part in parts for name in FEATURE_SETS[part])
            model = fit(
                teach, replace(settings, bags=2), name="ablation", version="0", names=names,
                criteria=("height",), workers=workers,
            )  # fmt: skip
            for place, rows in asked.items():
                p = model.intervals(rows.features, rows.names, [ratio]).probability[:, 0]
                told[place][label] = np.clip(p, FLOOR, 1 - FLOOR)
    return {
        place: _compared_sets(told[place], rows, ratio, generator) for place, rows in cases.items()
    }


def knows_plain_run(dataset: Dataset) -> np.ndarray:
    """(n,) whether the plain Dysthe run was computed for each row."""
    return np.isfinite(dataset.plain_run).all(axis=1)


def _with_plain_run(dataset: Dataset) -> Dataset:
    """The rows for which the plain Dysthe run is known, with what it says as more features."""
    known = dataset.rows(knows_plain_run(dataset))
    return replace(
        known,
        features=np.hstack([known.features, known.plain_run]),
        names=(*known.names, *PLAIN_NAMES),
    )


def _compared_sets(told, shown, ratio, generator) -> dict:
    """Scores of the probabilities `told` by each set of features for the same rows."""
    y = shown.height >= ratio
    parts = {
        "log_skill_by_distance": {f"{d:g}": shown.distance == d for d in np.unique(shown.distance)},
        "log_skill_by_coverage": {
            label.removeprefix("coverage "): mask
            for label, mask in _bands("coverage", shown.column("coverage"), COVERAGE_BANDS)
        },
    }
    sets = []
    for label, p in told.items():
        row = score_row(label, p, y, shown.sea, generator=generator)
        by_part = {
            name: {
                place: float(log_skill(p[mask], y[mask]))
                for place, mask in masks.items()
                if 0 < y[mask].sum() < mask.sum()
            }
            for name, masks in parts.items()
        }
        scores = {"log_skill": row.scores["log skill"], "roc": row.scores["ROC"]}
        sets.append({"features": label, **scores, **by_part})
    gains = [
        {"from": less, "to": more, **_gain(told[less], told[more], y, shown.sea, generator)}
        for less, more in GAINS
        if less in told
    ]
    return {"ratio": ratio, "sets": sets, "gains": gains}


def _gain(worse, better, y, sea, generator) -> dict:
    """Gain in mean log score from one forecast to another, with its by-sea interval."""
    gain = bootstrap_difference(
        logarithmic_score, worse, better, y, sea, generator=generator, replicates=REPLICATES
    )
    return {"gain_in_log_score": gain.value, "gain_90": [gain.low, gain.high]}


def verify(
    model: Model, dataset: Dataset, *, elsewhere: dict[str, Dataset] | None = None,
    taught: Dataset | None = None,
    settings: TrainSettings | None = None, ratios: tuple[float, ...] = (1.6, 2.0), seed: int = 0,
    workers: int = 1, progress: Callable[[str], None] = lambda message: None,
) -> dict:  # fmt: skip
    """Everything that is measured of a model on seas never trained on, ready for JSON.

    Parameters
    ----------
    model : Model
    dataset : Dataset
        Of the verification recipe.
    elsewhere : dict of str to Dataset or None
        More seas, each scored in a table of its own.
    taught : Dataset or None
        The training seas: with them, baselines are calibrated and compared.
    settings : TrainSettings or None
        With these too, an ablation is fitted and scored.
    ratios : tuple of float
        Height ratios.
    seed : int
        Of the resampling.
    workers : int
        Processes that the ablation may use.
    progress : callable
        Told what is being done.
    """
    generator = np.random.default_rng(seed)
    result = {
        "model": {"name": model.identity.name, "version": model.identity.version},
        "rows": "downwave intervals after the issue time with coverage >= "
        f"{HORIZON_COVERAGE:g}; intervals 90 %, from resampled seas",
        "ratios": {},
    }
    for ratio in ratios:
        shown = forecast_rows(dataset)
        p = model.intervals(shown.features, shown.names, [ratio]).probability[:, 0]
        y = shown.height >= ratio
        tables = {"intervals": model_table, "horizons": horizon_table}
        entry = {
            name: [_as_dict(row) for row in table(model, dataset, ratio, generator=generator)]
            for name, table in tables.items()
        }
        if 0 < y.sum() < y.size:
            parts = isotonic_decomposition(p, y)
            entry["brier_parts"] = {name: float(v) for name, v in parts._asdict().items()}
            entry["precision_recall"] = float(precision_recall_area(p, y))
            entry["reliability"] = _reliability(p, y)
            if taught is not None:
                entry["baselines"] = baseline_table(
                    model, taught, dataset, ratio, generator=generator
                )
        result["ratios"][f"{ratio:g}"] = entry
    elsewhere = elsewhere or {}
    result["elsewhere"] = {
        place: {
            f"{ratio:g}": [
                _as_dict(row) for row in model_table(model, rows, ratio, generator=generator)
            ]
            for ratio in ratios
        }
        for place, rows in elsewhere.items()
    }
    if taught is not None and settings is not None:
        cases = {
            "the seas above": forecast_rows(dataset),
            f"the seas above, coverage {BARELY:g} to {HORIZON_COVERAGE:g}": (
                barely_measured_rows(dataset)
            ),
            **{place: forecast_rows(rows) for place, rows in elsewhere.items()},
        }
        result["ablation"] = ablation(
            taught, cases, settings, ratios[0],
            generator=generator, workers=workers, progress=progress,
        )  # fmt: skip
    return result


def _reliability(p, y) -> dict:
    curve = reliability_curve(p, y, bins=RELIABILITY_EDGES)
    return {name: np.asarray(getattr(curve, name)).tolist() for name in curve.__slots__}


def _as_dict(row: Row) -> dict:
    return {
        "label": row.label,
        "seas": row.seas,
        "seas_with_events": row.seas_with_events,
        "cases": row.cases,
        "events": row.events,
        "scores": {name: [round(float(x), 5) for x in v] for name, v in row.scores.items()},
    }
