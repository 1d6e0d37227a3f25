"""The fitted model: features of an interval and a threshold in, a probability out.

P(largest height (crest) in the interval >= k Hs | features) is the mean over bags of boosted
trees, in log odds, with k an input: the trees see k and "what the run says less k", and fall in
k by construction (monotone constraints).  A calibration line on the log odds, fitted on seas that
no bag has seen, follows.  A model is arrays and numbers only; reading one runs no code.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from forecaster.datatypes import ModelIdentity
from forecaster.errors import FeatureMismatchError, ModelError, ModelIntegrityError
from forecaster.learning.events import CREST_RATIOS, HEIGHT_RATIOS
from forecaster.learning.features import FEATURES

CRITERIA = {"height": HEIGHT_RATIOS, "crest": CREST_RATIOS}
# features, times a factor, from which the threshold is taken; the first is the run's forecast
MARGINS = {
    "height": {
        "run_height": 1.0, "run_height_wide": 1.0, "run_envelope": 1.0, "full_height": 1.0,
        "linear_height": 1.0, "plain_height": 1.0, "plain_height_wide": 1.0, "plain_envelope": 1.0,
        "reach_50": 1.0, "reach_10": 1.0, "reach_1": 1.0, "arriving_short": 1.0,
        "arriving_long": 1.0,
    },
    "crest": {
        "run_crest": 1.0, "run_crest_wide": 1.0, "full_crest": 1.0, "run_envelope": 0.5,
        "reach_50": 0.5, "reach_10": 0.5, "reach_1": 0.5,
    },
}  # fmt: skip
LINE_COVERAGE, LINE_CENTRE = (0.5, 1.0), 0.8  # coverages told apart by the calibration line
_FIELDS = ("feature", "threshold", "left", "right", "value")


def threshold_columns(features, names, criterion, ratios) -> np.ndarray:
    """Inputs of the trees: features, then k, then each margin (feature less k).

    Parameters
    ----------
    features : (n, f) array
    names : tuple of str
    criterion : str
        ``"height"`` or ``"crest"``.
    ratios : (n,) array
        One threshold a row.
    """
    ratios = np.asarray(ratios, np.float32)[:, None]
    margins = MARGINS[criterion]
    used = [name for name in margins if name in names]
    scale = np.array([margins[name] for name in used], np.float32)
    level = features[:, [names.index(name) for name in used]] * scale
    return np.hstack([features, ratios, level - ratios])


def monotone_signs(names, criterion) -> list[int]:
    """Constraint of each column of `threshold_columns`: the probability falls in k."""
    margins = sum(name in names for name in MARGINS[criterion])
    return [0] * len(names) + [-1] + [1] * margins


@dataclass(frozen=True, slots=True, eq=False)
class Trees:
    """Boosted trees of one bag as flat arrays: log odds = base + sum of leaf values.

    Parameters
    ----------
    base : float
    roots : (t,) int array
        First node of each tree.
    feature, left, right : (nodes,) int arrays
        Column tested and the node to go to; a leaf points to itself.
    threshold, value : (nodes,) float32 arrays
        Go left where the column is <= threshold; log odds of a leaf.
    depth : int
        Most steps from a root to a leaf.
    """

    base: float
    roots: np.ndarray
    feature: np.ndarray
    left: np.ndarray
    right: np.ndarray
    threshold: np.ndarray
    value: np.ndarray
    depth: int

    def log_odds(self, columns) -> np.ndarray:
        """(n,) log odds for (n, c) columns."""
        columns = np.ascontiguousarray(columns)
        total = np.full(len(columns), self.base)
        for begin in range(0, len(columns), 512):  # keeps the walk in the processor's cache
            block = columns[begin : begin + 512]
            rows = np.arange(len(block))[:, None]
            node = np.broadcast_to(self.roots, (len(block), self.roots.size))
            for _ in range(self.depth):
                go_left = block[rows, self.feature[node]] <= self.threshold[node]
                node = np.where(go_left, self.left[node], self.right[node])
            total[begin : begin + 512] += self.value[node].sum(axis=1, dtype=float)
        return total


@dataclass(frozen=True, slots=True, eq=False)
class Head:
    """What answers for one criterion.

    Parameters
    ----------
    names : tuple of str
        Features used.
    bags : tuple of Trees
    line : (4,) array
        Calibration of the mean log odds L: coefficients of `line_terms`.
    line_covariance : (4, 4) array
        Of these, seas being independent.
    horizon : (2,) array
        c0, c1 of log(-log(1 - P)) = c0 + c1 log(sum of -log(1 - p)) over the horizon's
        intervals (equal to independence at 0, 1).
    """

    names: tuple[str, ...]
    bags: tuple[Trees, ...]
    line: np.ndarray
    line_covariance: np.ndarray
    horizon: np.ndarray


@dataclass(frozen=True, slots=True, eq=False)
class Probabilities:
    """Calibrated probabilities and the standard error of their log odds, both (n, k)."""

    probability: np.ndarray
    error: np.ndarray


def line_terms(log_odds, coverage) -> np.ndarray:
    """(n, 4) terms 1, L, c, c L of the calibration line of log odds L (n,).

    c is the coverage (n,) within `LINE_COVERAGE`, less 0.8: what a run is worth, and hence how
    far its log odds may be trusted, depends on how much of the sea it has seen.
    """
    c = np.clip(np.asarray(coverage, float), *LINE_COVERAGE) - LINE_CENTRE
    return np.stack([np.ones_like(log_odds), log_odds, c, c * log_odds], axis=-1)


def line_slopes(line) -> np.ndarray:
    """Slopes of a calibration line on the log odds at both ends of `LINE_COVERAGE`."""
    return line[1] + line[3] * (np.array(LINE_COVERAGE) - LINE_CENTRE)


def _expit(x):
    return 0.5 * (1 + np.tanh(0.5 * np.asarray(x)))


def _logit(p):
    return np.log(p) - np.log1p(-p)


@dataclass(frozen=True, slots=True, eq=False)
class Model:
    """A fitted, calibrated model.

    Parameters
    ----------
    identity : ModelIdentity
    heads : dict of str to Head
        By criterion.
    ranges : dict of str to (low, high)
        Of each feature in the seas it was taught on (0.2 and 99.8 % quantiles).
    """

    identity: ModelIdentity
    heads: dict[str, Head]
    ranges: dict[str, tuple[float, float]]

    def intervals(self, features, names, ratios, *, criterion="height") -> Probabilities:
        """P(largest ratio in each interval >= k) for all thresholds.

        Parameters
        ----------
        features : (n, f) array
            Columns `names`, as `features.feature_table` gives.
        names : tuple of str
        ratios : (k,) array
            Within the criterion's range (`CRITERIA`).
        criterion : str

        Returns
        -------
        Probabilities
            (n, k); falls in k.

        Raises
        ------
        ModelError
            If the model has no head for the criterion.
        FeatureMismatchError
            If a feature that it needs is not among `names`.
        """
        if criterion not in self.heads:
            raise ModelError(
                f"the model answers for {', '.join(self.heads)} only, not for {criterion!r}"
            )
        head = self.heads[criterion]
        missing = [name for name in dict.fromkeys((*head.names, "coverage")) if name not in names]
        if missing:
            raise FeatureMismatchError(
                f"the model needs the features {', '.join(missing)}, which were not computed"
            )
        table = np.asarray(features)[:, [names.index(name) for name in head.names]]
        ratios = np.asarray(ratios, float)
        rows = np.repeat(table, ratios.size, axis=0)
        columns = threshold_columns(rows, head.names, criterion, np.tile(ratios, len(table)))
        bags = np.stack([trees.log_odds(columns) for trees in head.bags])
        mean = bags.mean(axis=0)
        spread = bags.std(axis=0, ddof=1)
        coverage = np.repeat(np.asarray(features)[:, names.index("coverage")], ratios.size)
        terms = line_terms(mean, coverage)
        variance = np.einsum("ni,ij,nj->n", terms, head.line_covariance, terms)
        slope = line_terms(mean + 1, coverage) @ head.line - terms @ head.line
        error = np.sqrt((slope * spread) ** 2 + np.maximum(variance, 0.0))
        shape = (len(table), ratios.size)
        probability = _expit(terms @ head.line)
        return Probabilities(probability.reshape(shape), error.reshape(shape))

    def horizon(self, intervals: Probabilities, *, criterion="height") -> Probabilities:
        """P(largest ratio in the whole horizon >= k): (1, k) from the (n, k) of its intervals.

        Intervals are not independent: the link is fitted on calibration seas (`Head.horizon`).
        The error is that of the intervals taken together, as they share the model.
        """
        c0, c1 = self.heads[criterion].horizon
        p = np.clip(intervals.probability, 1e-12, 1 - 1e-9)
        hazard = -np.log1p(-p)
        total = hazard.sum(axis=0)
        joint = -np.expm1(-np.exp(c0 + c1 * np.log(total)))
        # p moves by p(1-p) per unit of log odds, hence the hazard by p
        moved = (p * intervals.error).sum(axis=0) / total * c1
        at_joint = np.clip(joint, 1e-12, 1 - 1e-9)
        # d logit(P) / d log(hazard) = H / P with H the joint hazard
        error = moved * (-np.log1p(-at_joint)) / at_joint
        return Probabilities(joint[None], error[None])


def interval_90(probability, error) -> tuple[np.ndarray, np.ndarray]:
    """90 % interval of a probability whose log odds have standard error `error`.

    >>> low, high = interval_90(0.5, 1.0)
    >>> round(float(low), 3), round(float(high), 3)
    (0.162, 0.838)
    """
    centre = _logit(np.clip(probability, 1e-12, 1 - 1e-12))
    low, high = _expit(centre - 1.645 * error), _expit(centre + 1.645 * error)
    return np.minimum(low, probability), np.maximum(high, probability)


def head_arrays(head: Head, prefix: str) -> dict[str, np.ndarray]:
    """A head as plain arrays for a model file, names beginning with `prefix`."""
    arrays = {
        f"{prefix}_names": np.array(head.names),
        f"{prefix}_line": head.line,
        f"{prefix}_line_covariance": head.line_covariance,
        f"{prefix}_horizon": head.horizon,
    }
    for number, trees in enumerate(head.bags):
        place = f"{prefix}_{number}"
        arrays[f"{place}_shape"] = np.array([trees.base, trees.depth])
        arrays[f"{place}_roots"] = trees.roots.astype(np.int32)
        arrays[f"{place}_feature"] = trees.feature.astype(np.int16)
        node = np.min_scalar_type(trees.feature.size)
        arrays[f"{place}_left"] = trees.left.astype(node)
        arrays[f"{place}_right"] = trees.right.astype(node)
        arrays[f"{place}_threshold"] = trees.threshold.astype(np.float32)
        arrays[f"{place}_value"] = trees.value.astype(np.float32)
    return arrays


def head_from_arrays(arrays: dict[str, np.ndarray], prefix: str) -> Head:
    """The head that `head_arrays` wrote.

    Raises
    ------
    ModelIntegrityError
        For missing arrays, nodes that point outside their tree, or numbers that are not finite.
    FeatureMismatchError
        For features that this version does not compute.
    """
    try:
        names = tuple(str(name) for name in arrays[f"{prefix}_names"])
        line = np.asarray(arrays[f"{prefix}_line"], float).reshape(4)
        covariance = np.asarray(arrays[f"{prefix}_line_covariance"], float).reshape(4, 4)
        horizon = np.asarray(arrays[f"{prefix}_horizon"], float).reshape(2)
        bags = []
        while f"{prefix}_{len(bags)}_shape" in arrays:
            bags.append(_trees_from_arrays(arrays, f"{prefix}_{len(bags)}"))
    except (KeyError, TypeError, ValueError) as error:
        raise ModelIntegrityError(f"the model file lacks or garbles {error}") from error
    unknown = [name for name in names if name not in FEATURES]
    if unknown:
        raise FeatureMismatchError(
            f"the model needs features that this version does not compute: {', '.join(unknown)}"
        )
    columns = len(names) + 1 + sum(name in names for name in MARGINS[prefix])
    for trees in bags:
        if trees.feature.min(initial=0) < 0 or trees.feature.max(initial=0) >= columns:
            raise ModelIntegrityError(f"a tree of the model tests a column beyond {columns}")
    numbers = [*line, *horizon, *covariance.ravel()]
    rising = np.isfinite(numbers).all() and line_slopes(line).min() > 0 and horizon[1] > 0
    if len(bags) < 2 or not rising:
        raise ModelIntegrityError("the model file lacks bags, or its calibration is not usable")
    return Head(names, tuple(bags), line, covariance, horizon)


def _trees_from_arrays(arrays, place):
    base, depth = (float(x) for x in arrays[f"{place}_shape"])
    parts = {name: arrays[f"{place}_{name}"] for name in ("roots", *_FIELDS)}
    nodes = parts["feature"].size
    for name, kinds in {"roots": "iu", "feature": "iu", "left": "iu", "right": "iu",
                        "threshold": "f", "value": "f"}.items():  # fmt: skip
        array = parts[name]
        if array.dtype.kind not in kinds or array.ndim != 1 or array.size == 0:
            raise ModelIntegrityError(
                f"{place}_{name} is {array.dtype} of shape {array.shape}, not a row of numbers"
            )
    for name in ("left", "right", "roots"):
        if parts[name].min() < 0 or parts[name].max() >= nodes:
            raise ModelIntegrityError(f"{place}_{name} points outside its {nodes} nodes")
    sizes = {parts[name].size for name in _FIELDS}
    if sizes != {nodes} or not 1 <= depth <= 64:
        raise ModelIntegrityError(f"{place}: arrays of unequal size, or depth {depth:g} of 1..64")
    # a leaf's threshold is infinite
    if not np.isfinite([base, *parts["value"]]).all() or np.isnan(parts["threshold"]).any():
        raise ModelIntegrityError(f"{place} holds numbers that are not finite")
    return Trees(
        base,
        parts["roots"].astype(np.intp),
        parts["feature"].astype(np.intp),
        parts["left"].astype(np.intp),
        parts["right"].astype(np.intp),
        parts["threshold"],
        parts["value"],
        int(depth),
    )
