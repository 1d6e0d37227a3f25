from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from scipy.special import expit, logit
from sklearn.ensemble import HistGradientBoostingClassifier
from threadpoolctl import threadpool_limits

from forecaster.datatypes import ModelIdentity
from forecaster.errors import FeatureMismatchError, ModelError, ModelIntegrityError
from forecaster.learning.model import (
    CRITERIA,
    MARGINS,
    Head,
    Model,
    Probabilities,
    Trees,
    head_arrays,
    head_from_arrays,
    interval_90,
    monotone_signs,
    threshold_columns,
)
from forecaster.learning.train import _flattened
from tests import tiny_model

NAMES = ("steepness", "run_height", "run_crest", "run_envelope", "coverage")


@pytest.fixture(scope="module", autouse=True)
def one_thread():
    """scikit-learn's threads wait for each other where the machine is busy."""
    with threadpool_limits(1):
        yield


@cache
def booster(criterion, seed, *, rounds=20):
    """Monotone trees fitted to noise and a little of what matters, and what they were shown."""
    generator = np.random.default_rng(seed)
    features = generator.uniform(0, 2, (1500, len(NAMES))).astype(np.float32)
    ratios = generator.uniform(*CRITERIA[criterion], 1500)
    columns = threshold_columns(features, NAMES, criterion, ratios)
    reached = features[:, 1] + generator.standard_normal(1500) > ratios
    fitted = HistGradientBoostingClassifier(
        max_iter=rounds, learning_rate=0.3, max_leaf_nodes=9, min_samples_leaf=5,
        monotonic_cst=monotone_signs(NAMES, criterion), early_stopping=False, random_state=seed,
    ).fit(columns, reached)  # fmt: skip
    return fitted, columns


LINE = np.array([-0.4, 0.8, 0.3, 0.2])
LINE_COVARIANCE = np.array(
    [
        [0.02, 0.001, 0, 0],
        [0.001, 0.004, 0, 0],
        [0, 0, 0.03, 0.002],
        [0, 0, 0.002, 0.01],
    ]
)


def noisy_model(*, seeds=(1, 2), horizon=(0.0, 1.0)):
    heads = {
        criterion: Head(
            NAMES, tuple(_flattened(booster(criterion, seed)[0]) for seed in seeds), LINE,
            LINE_COVARIANCE, np.array(horizon),
        )
        for criterion in CRITERIA
    }  # fmt: skip
    return Model(ModelIdentity("noisy", "1", ""), heads, {name: (0.0, 2.0) for name in NAMES})


@pytest.fixture(scope="module")
def noisy():
    return noisy_model()


def single_tree():
    """By hand: log odds 0.5, plus -1 where column 0 <= 2, else +2 or, above 5 in column 1, +3."""
    return Trees(
        base=0.5,
        roots=np.array([0]),
        feature=np.array([0, 0, 1, 0, 0]),
        left=np.array([1, 1, 3, 3, 4]),
        right=np.array([2, 1, 4, 3, 4]),
        threshold=np.array([2.0, np.inf, 5.0, np.inf, np.inf]),
        value=np.array([0.0, -1.0, 0.0, 2.0, 3.0]),
        depth=2,
    )


# --- trees ---


def test_a_tree_walked_by_hand():
    columns = np.array([[1.0, 9.0], [2.0, 0.0], [2.1, 5.0], [3.0, 5.1]])
    assert single_tree().log_odds(columns).tolist() == [-0.5, -0.5, 2.5, 3.5]


def test_two_trees_add_up():
    one = single_tree()
    two = replace(one, roots=np.array([0, 2]))  # the second tree is the first one's right branch
    assert two.log_odds(np.array([[1.0, 9.0], [3.0, 5.1]])).tolist() == [2.5, 6.5]


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("criterion", CRITERIA)
def test_flat_trees_equal_the_library_that_grew_them(criterion, seed):
    # independent code: scikit-learn's own walk; leaves are rounded to single precision, so a tree
    # may differ by 2^-24 of its leaf, and a wrong turn by much more
    fitted, columns = booster(criterion, seed)
    other = np.random.default_rng(99).uniform(-1, 4, columns.shape).astype(np.float32)
    trees = _flattened(fitted)
    rounding = trees.roots.size * np.abs(trees.value).max() * 2.0**-24
    for rows in (columns, other):
        np.testing.assert_allclose(
            trees.log_odds(rows), fitted.decision_function(rows), rtol=0, atol=rounding
        )


def test_a_column_equal_to_a_threshold_goes_left_in_single_precision_too():
    # by hand: thresholds between two floats of single precision decide between these two
    fitted, _ = booster("height", 0)
    trees = _flattened(fitted)
    inner = np.isfinite(trees.threshold)
    exact = np.concatenate(
        [
            np.where(nodes["is_leaf"].astype(bool), np.inf, nodes["num_threshold"])
            for (predictor,) in fitted._predictors
            for nodes in [predictor.nodes]
        ]
    )[inner]
    single = trees.threshold[inner]
    assert single.dtype == np.float32 and inner.sum() > 20
    assert (single <= exact).all()
    assert (np.nextafter(single, np.float32(np.inf)) > exact).all()


def test_more_rows_than_a_block_change_nothing(noisy):
    trees = noisy.heads["height"].bags[0]
    columns = np.random.default_rng(3).uniform(0, 2, (1300, 5 + 1 + 2)).astype(np.float32)
    single = [float(trees.log_odds(row[None])[0]) for row in columns[500:530]]
    assert trees.log_odds(columns)[500:530].tolist() == single


# --- the threshold among the columns ---


def test_columns_by_hand():
    features = np.array([[0.1, 1.5, 0.9, 1.6, 0.7]], np.float32)
    columns = threshold_columns(features, NAMES, "height", [1.2])
    np.testing.assert_allclose(columns, [[0.1, 1.5, 0.9, 1.6, 0.7, 1.2, 0.3, 0.4]], rtol=1e-6)
    # a crest is about half a height, so half the envelope height stands against it
    columns = threshold_columns(features, NAMES, "crest", [0.5])
    np.testing.assert_allclose(columns, [[0.1, 1.5, 0.9, 1.6, 0.7, 0.5, 0.4, 0.3]], rtol=1e-6)
    assert monotone_signs(NAMES, "height") == [0, 0, 0, 0, 0, -1, 1, 1]


@pytest.mark.parametrize("criterion", CRITERIA)
def test_signs_and_columns_go_together(criterion):
    names = tuple(MARGINS[criterion])
    columns = threshold_columns(np.ones((2, len(names)), np.float32), names, criterion, [1, 1])
    assert columns.shape[1] == len(monotone_signs(names, criterion))


# --- probabilities of intervals ---


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("criterion", CRITERIA)
def test_noisy_trees_fall_in_the_threshold(criterion, seed):
    model = noisy_model(seeds=(10 + seed, 20 + seed))
    features = np.random.default_rng(seed).uniform(-0.5, 3, (200, len(NAMES))).astype(np.float32)
    grid = np.linspace(*CRITERIA[criterion], 120)
    p = model.intervals(features, NAMES, grid, criterion=criterion).probability
    assert p.shape == (200, 120)
    assert (np.diff(p, axis=1) <= 0).all()
    assert (p[:, 0] > p[:, -1]).mean() > 0.9
    whole = model.horizon(Probabilities(p, np.zeros_like(p)), criterion=criterion).probability
    assert (np.diff(whole, axis=1) <= 0).all()


@pytest.mark.parametrize("criterion", CRITERIA)
def test_the_fitted_model_falls_in_the_threshold(criterion):
    rows = tiny_model.dataset()
    grid = np.linspace(*CRITERIA[criterion], 60)
    answer = tiny_model.model().intervals(rows.features[::5], rows.names, grid, criterion=criterion)
    assert (np.diff(answer.probability, axis=1) <= 0).all()
    assert ((answer.probability >= 0) & (answer.probability <= 1)).all()
    assert (answer.error > 0).all()


def test_the_answer_is_the_calibrated_mean_of_the_bags(noisy):
    # independent code: scikit-learn's log odds, scipy's expit
    features = np.random.default_rng(5).uniform(0, 2, (30, len(NAMES))).astype(np.float32)
    columns = threshold_columns(features, NAMES, "height", np.full(30, 1.7))
    bags = np.array([booster("height", seed)[0].decision_function(columns) for seed in (1, 2)])
    answer = noisy.intervals(features, NAMES, [1.7])
    mean = bags.mean(axis=0)
    # by hand: a line whose intercept and slope change with the coverage, kept within 0.5 .. 1
    c = np.clip(features[:, NAMES.index("coverage")].astype(float), 0.5, 1.0) - 0.8
    slope = 0.8 + 0.2 * c
    centre = -0.4 + 0.3 * c + slope * mean
    np.testing.assert_allclose(answer.probability[:, 0], expit(centre), rtol=1e-6)
    # by hand: variances of the bags' log odds and of the line at their mean
    variance = slope**2 * (bags[0] - bags[1]) ** 2 / 2 + 0.02 + 2 * 0.001 * mean + 0.004 * mean**2
    variance += 0.03 * c**2 + 2 * 0.002 * c**2 * mean + 0.01 * (c * mean) ** 2
    np.testing.assert_allclose(answer.error[:, 0] ** 2, variance, rtol=1e-6)


def test_columns_may_come_in_any_order_and_number(noisy):
    features = np.random.default_rng(5).uniform(0, 2, (9, len(NAMES))).astype(np.float32)
    straight = noisy.intervals(features, NAMES, [1.0, 2.0]).probability
    turned = noisy.intervals(
        np.hstack([features[:, ::-1], features[:, :1] + 7]), (*NAMES[::-1], "bfi"), [1.0, 2.0]
    ).probability
    assert np.array_equal(straight, turned)


def test_missing_features_and_criteria_are_refused(noisy):
    with pytest.raises(FeatureMismatchError, match="run_crest, coverage"):
        noisy.intervals(np.ones((1, 3)), ("steepness", "run_height", "run_envelope"), [2.0])
    only = replace(noisy, heads={"height": noisy.heads["height"]})
    with pytest.raises(ModelError, match="height only, not for 'crest'"):
        only.intervals(np.ones((1, 5)), NAMES, [1.0], criterion="crest")


# --- horizons ---


def test_a_horizon_of_one_interval_is_the_interval(noisy):
    p = np.array([[0.9999, 0.3, 1e-3, 1e-7]])
    error = np.array([[0.2, 0.5, 0.8, 1.1]])
    whole = noisy.horizon(Probabilities(p, error))
    np.testing.assert_allclose(whole.probability, p, rtol=1e-9)
    np.testing.assert_allclose(whole.error, error, rtol=1e-6)


def test_independent_intervals_multiply(noisy):
    # exact: 1 - product of (1 - p)
    p = np.random.default_rng(8).uniform(0, 0.3, (7, 5))
    whole = noisy.horizon(Probabilities(p, np.zeros_like(p))).probability
    np.testing.assert_allclose(whole[0], 1 - np.prod(1 - p, axis=0), rtol=1e-9)


def test_dependent_intervals_follow_the_fitted_link():
    # by hand: c0 = -0.2, c1 = 0.9 and two intervals of p = 0.1: H = (-2 ln 0.9)^0.9 e^-0.2
    model = noisy_model(horizon=(-0.2, 0.9))
    p = np.array([[0.1], [0.1]])
    whole = model.horizon(Probabilities(p, np.zeros_like(p))).probability[0, 0]
    hazard = np.exp(-0.2) * (-2 * np.log(0.9)) ** 0.9
    assert whole == pytest.approx(1 - np.exp(-hazard), rel=1e-12)


@pytest.mark.parametrize("horizon", [(0.0, 1.0), (-0.3, 0.85)])
def test_the_error_of_a_horizon_is_that_of_its_log_odds(horizon):
    # independent code: all log odds moved by a small multiple of their errors
    model = noisy_model(horizon=horizon)
    generator = np.random.default_rng(4)
    p, error = generator.uniform(1e-4, 0.4, (6, 3)), generator.uniform(0.1, 0.6, (6, 3))
    small = 1e-5
    moved = expit(logit(p) + small * error)
    before, after = (model.horizon(Probabilities(x, error)) for x in (p, moved))
    slope = (logit(after.probability) - logit(before.probability)) / small
    np.testing.assert_allclose(before.error, slope, rtol=1e-3)


def test_certain_and_impossible_intervals_stay_numbers(noisy):
    p = np.array([[0.0, 1.0, 0.5], [0.0, 1.0, 0.5]])
    whole = noisy.horizon(Probabilities(p, np.full_like(p, 0.3)))
    assert np.isfinite(whole.probability).all() and np.isfinite(whole.error).all()
    np.testing.assert_allclose(whole.probability[0], [0, 1, 0.75], atol=1e-8)


@pytest.mark.parametrize("p", [0.0, 1e-15, 1e-6, 0.2, 0.5, 0.999, 1.0])
@pytest.mark.parametrize("error", [0.0, 0.3, 2.0])
def test_the_90_percent_interval_holds_the_probability(p, error):
    low, high = interval_90(p, error)
    assert 0 <= low <= p <= high <= 1
    if 1e-9 < p < 0.9999:
        # exact: the normal law's 5 and 95 % quantiles are 1.645 standard deviations away
        np.testing.assert_allclose(
            [low, high], expit(logit(p) + 1.645 * error * np.array([-1, 1])), rtol=1e-6
        )


# --- a head as arrays ---


@pytest.fixture
def arrays(noisy):
    return head_arrays(noisy.heads["height"], "height")


def test_arrays_give_the_head_back(noisy, arrays):
    head = noisy.heads["height"]
    again = head_from_arrays(arrays, "height")
    assert again.names == head.names and len(again.bags) == 2
    columns = np.random.default_rng(0).uniform(0, 2, (50, 8)).astype(np.float32)
    for one, other in zip(head.bags, again.bags, strict=True):
        assert np.array_equal(one.log_odds(columns), other.log_odds(columns))
    assert np.array_equal(again.line, head.line)
    assert np.array_equal(again.line_covariance, head.line_covariance)
    assert np.array_equal(again.horizon, head.horizon)


def _set(name, index, value):
    def change(arrays):
        array = arrays[name].copy()
        if array.dtype.kind in "iu":
            array = array.astype(np.int64)
        array[index] = value
        arrays[name] = array

    return change


def _whole(name, value):
    def change(arrays):
        arrays[name] = value(arrays[name]) if callable(value) else value

    return change


def _without(name):
    def change(arrays):
        del arrays[name]

    return change


@pytest.mark.parametrize(
    "change",
    [
        _set("height_0_left", 0, 10**6),
        _set("height_0_right", 0, -1),
        _set("height_1_roots", 1, 10**6),
        _set("height_0_feature", 0, 8),  # columns are 0 .. 7
        _set("height_0_feature", 0, -3),
        _set("height_0_value", 3, np.nan),
        _set("height_0_value", 3, np.inf),
        _set("height_0_threshold", 0, np.nan),
        _set("height_0_shape", 0, np.nan),
        _set("height_0_shape", 1, 65),
        _set("height_0_shape", 1, 0),
        _set("height_line", 1, 0.0),
        _set("height_line", 1, -0.5),
        _set("height_line", 3, 10.0),  # the slope would be negative at low coverage
        _set("height_line", 3, -10.0),
        _set("height_line", 0, np.nan),
        _set("height_line_covariance", (0, 0), np.nan),
        _set("height_horizon", 0, np.inf),
        _set("height_horizon", 1, -1.0),
        _whole("height_0_left", lambda a: a.astype(float)),
        _whole("height_0_feature", lambda a: a.astype(float)),
        _whole("height_0_value", lambda a: a[:-1]),
        _whole("height_0_value", lambda a: a[:, None]),
        _whole("height_0_value", lambda a: a.astype(str)),
        _whole("height_0_threshold", lambda a: a.astype(complex)),
        _whole("height_0_roots", np.empty(0, np.int32)),
        _whole("height_0_shape", np.array([1.0, 2.0, 3.0])),
        _whole("height_0_shape", np.array(["a", "b"])),
        _whole("height_line", np.array(0.5)),
        _whole("height_horizon", np.zeros(3)),
        _whole("height_line_covariance", np.zeros(5)),
        _without("height_line"),
        _without("height_names"),
        _without("height_horizon"),
        _without("height_0_value"),
        _without("height_0_roots"),
        _without("height_1_shape"),  # one bag is left: it cannot say how sure it is
        _without("height_0_shape"),
    ],
)
def test_tampered_arrays_are_refused(arrays, change):
    change(arrays)
    with pytest.raises(ModelIntegrityError):
        head_from_arrays(arrays, "height")


def test_features_of_another_version_are_named(arrays):
    arrays["height_names"] = np.array(["steepness", "moon_phase", "run_crest", "bfi", "tide"])
    with pytest.raises(FeatureMismatchError, match="moon_phase, tide"):
        head_from_arrays(arrays, "height")
