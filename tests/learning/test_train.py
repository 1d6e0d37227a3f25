from dataclasses import replace
from math import inf

import numpy as np
import pytest
from scipy.special import expit
from sklearn.linear_model import LogisticRegression

from forecaster.errors import InputError, NumericsError
from forecaster.learning import train
from forecaster.learning.dataset import Dataset
from forecaster.learning.features import FEATURES
from forecaster.learning.model import CRITERIA, head_arrays
from forecaster.learning.train import (
    CALIBRATION_RATIOS,
    draw_thresholds,
    fit,
    fit_head,
    horizon_groups,
    shown_rows,
    split_seas,
)
from tests import tiny_model

SETTINGS = replace(
    tiny_model.SETTINGS, boosting_rounds=6, leaves=4, rows_per_bag=3000, samples_per_leaf=20
)


@pytest.fixture(scope="module")
def rows():
    return tiny_model.dataset()


def handmade(**columns):
    """Rows by hand: features 0 but those given."""
    n = len(next(iter(columns.values())))
    features = np.zeros((n, len(FEATURES)), np.float32)
    own = {"sea": np.zeros(n, np.int32), "record": np.zeros(n, np.int32)}
    for name, values in columns.items():
        if name in FEATURES:
            features[:, list(FEATURES).index(name)] = values
        else:
            own[name] = np.asarray(values, np.int32)
    nothing = {name: np.zeros(n, np.float32) for name in Dataset.__slots__[1:]}
    del nothing["names"]
    return Dataset(features=features, **{**nothing, **own})


# --- splits ---


def test_no_sea_is_on_both_sides(rows):
    fit_on, calibrate_on = split_seas(rows, SETTINGS)
    assert not set(fit_on) & set(calibrate_on)
    assert set(fit_on) | set(calibrate_on) == set(rows.sea)
    # by hand: a quarter of 12
    assert calibrate_on.size == 3
    again = split_seas(rows, SETTINGS)
    assert np.array_equal(again[0], fit_on) and np.array_equal(again[1], calibrate_on)
    other = split_seas(rows, replace(SETTINGS, root_seed=4))
    assert not np.array_equal(other[1], calibrate_on)


def test_the_split_does_not_hang_on_the_order_of_rows(rows):
    turned = rows.rows(np.arange(rows.sea.size)[::-1])
    for one, other in zip(split_seas(rows, SETTINGS), split_seas(turned, SETTINGS), strict=True):
        assert np.array_equal(one, other)


def test_too_few_seas_are_refused(rows):
    with pytest.raises(InputError, match="3 seas are too few"):
        fit(rows.rows(rows.sea < 3), SETTINGS, name="few", version="1")


def test_the_fit_sees_only_its_own_seas(rows, monkeypatch):
    seen = {}
    whole = train.fit_head

    def noted(fitted, held, criterion, settings, **options):
        seen[criterion] = set(fitted.sea), set(held.sea)
        return whole(fitted, held, criterion, settings, **options)

    monkeypatch.setattr(train, "fit_head", noted)
    fit(rows, SETTINGS, name="tiny", version="1")
    expected = tuple(set(seas) for seas in split_seas(rows, SETTINGS))
    assert seen == {criterion: expected for criterion in CRITERIA}


# --- thresholds ---


@pytest.mark.parametrize("criterion", CRITERIA)
def test_thresholds_lie_in_the_range_and_do_not_know_the_outcome(rows, criterion):
    low, high = CRITERIA[criterion]
    drawn = draw_thresholds(rows, criterion, 4, np.random.default_rng(1))
    assert drawn.shape == (rows.sea.size, 4)
    assert drawn.min() >= np.float32(low) and drawn.max() <= np.float32(high)
    # by hand: the first is uniform, 4 standard errors of a mean
    middle, error = 0.5 * (low + high), (high - low) / np.sqrt(12 * rows.sea.size)
    assert abs(drawn[:, 0].mean() - middle) < 4 * error
    turned = replace(rows, height=rows.height[::-1], crest=rows.crest[::-1])
    assert np.array_equal(draw_thresholds(turned, criterion, 4, np.random.default_rng(1)), drawn)


def test_one_threshold_is_enough(rows):
    assert draw_thresholds(rows, "height", 1, np.random.default_rng(1)).shape[1] == 1


# --- calibration ---


def test_what_is_calibrated_on_is_what_a_forecast_shows():
    rows = handmade(coverage=[0.49, 0.5, 0.0, 1.0], distance_wavelengths=[5.0, 5.0, 0.0, 20.0])
    assert shown_rows(rows).tolist() == [False, True, True, True]


def test_one_horizon_a_record_and_distance():
    rows = handmade(
        coverage=[1, 1, 0.2, 1, 1, 1], distance_wavelengths=[5, 5, 5, 10, 5, 5],
        record=[0, 0, 0, 0, 1, 0], sea=[0, 0, 0, 0, 0, 1],
    )  # fmt: skip
    kept, group = horizon_groups(rows)
    assert kept.tolist() == [0, 1, 3, 4, 5]
    assert group[0] == group[1]
    assert len(set(group.tolist())) == 4


def test_the_calibration_line_is_recovered_with_its_error():
    # by hand: outcomes drawn with a line that changes with the coverage c; rows are independent,
    # so the covariance between seas is Fisher's, (X' W X)^-1
    true = np.array([-0.5, 1.4, 0.6, -0.8])
    generator = np.random.default_rng(6)
    x = generator.normal(-1, 1.5, (8000, 1))
    coverage = generator.uniform(0.5, 1.0, 8000)
    c = coverage - 0.8
    design = np.stack([np.ones(8000), x[:, 0], c, c * x[:, 0]], axis=1)
    p = expit(design @ true)
    y = generator.uniform(size=8000) < p
    line, covariance = train._calibrated_line(x, coverage, y[:, None], np.arange(8000) // 20)
    fisher = np.linalg.inv(design.T @ (design * (p * (1 - p))[:, None]))
    assert (np.abs(line - true) < 4 * np.sqrt(np.diag(fisher))).all()
    # 400 seas: the relative error of a standard deviation is about 1/sqrt(800)
    np.testing.assert_allclose(
        np.sqrt(np.diag(covariance)), np.sqrt(np.diag(fisher)), rtol=5 / np.sqrt(800)
    )


def test_trees_that_have_learnt_the_contrary_are_refused():
    generator = np.random.default_rng(6)
    x = generator.normal(size=(2000, 1))
    y = generator.uniform(size=x.shape) < expit(-2 * x)
    with pytest.raises(NumericsError, match="falls with the trees' log odds"):
        train._calibrated_line(x, np.full(2000, 0.9), y, np.arange(2000) // 20)


def horizons(link, *, groups=4000, size=6, seed=3):
    """Intervals of many horizons, and outcomes of a horizon drawn by a link c0, c1."""
    generator = np.random.default_rng(seed)
    p = generator.uniform(0.001, 0.25, (groups * size, 1)) * generator.uniform(
        0.02, 1, (groups, 1)
    ).repeat(size, axis=0)
    group = np.arange(groups).repeat(size)
    total = -np.log1p(-p).reshape(groups, size).sum(axis=1)
    joint = np.exp(link[0] + link[1] * np.log(total))
    happened = generator.uniform(size=groups) < -np.expm1(-joint)
    reached = np.zeros((groups * size, 1), bool)
    reached[::size, 0] = happened
    return p, reached, group


@pytest.mark.parametrize("link", [(0.0, 1.0), (-0.4, 0.8)])
def test_the_horizon_link_is_recovered(link):
    # exact: outcomes drawn by the link itself; 0, 1 is independence
    found = train._fit_horizon(*horizons(link))
    np.testing.assert_allclose(found, link, atol=0.12)


def test_independent_intervals_give_the_independent_link():
    generator = np.random.default_rng(9)
    level = generator.uniform(0.1, 1, (5000, 1)).repeat(6, axis=0)
    p = level * generator.uniform(0.001, 0.1, (30_000, 1))
    reached = generator.uniform(size=p.shape) < p
    found = train._fit_horizon(p, reached, np.arange(5000).repeat(6))
    np.testing.assert_allclose(found, (0, 1), atol=0.15)


def test_a_horizon_link_that_falls_is_refused():
    p, reached, group = horizons((-1.0, -0.8))
    with pytest.raises(NumericsError, match="link falls"):
        train._fit_horizon(p, reached, group)


# --- the whole fit ---


@pytest.fixture(scope="module")
def fitted(rows):
    return fit(rows, SETTINGS, name="tiny", version="1")


def test_a_fit_is_deterministic(rows, fitted):
    again = fit(rows, SETTINGS, name="tiny", version="1")
    for criterion, head in fitted.heads.items():
        one, other = head_arrays(head, criterion), head_arrays(again.heads[criterion], criterion)
        assert one.keys() == other.keys()
        for name, array in one.items():
            assert np.array_equal(array, other[name]), name


def test_bags_differ(fitted):
    for head in fitted.heads.values():
        values = [trees.value for trees in head.bags]
        assert len(values) == SETTINGS.bags
        assert not np.array_equal(*[np.resize(v, 20) for v in values[:2]])


def test_the_model_is_calibrated_on_the_seas_held_back(rows, fitted):
    # exact: the line maximises the likelihood, so a second line fitted to its answers is 0, 1;
    # independent code: scikit-learn logistic regression without penalty
    held = rows.rows(np.isin(rows.sea, split_seas(rows, SETTINGS)[1]))
    shown = held.rows(shown_rows(held))
    for criterion, ratios in CALIBRATION_RATIOS.items():
        p = fitted.intervals(shown.features, shown.names, ratios, criterion=criterion).probability
        y = getattr(shown, criterion)[:, None] >= np.array(ratios)
        # (in the mean too, as the line has an intercept)
        line = LogisticRegression(C=inf, tol=1e-12, max_iter=1000)
        line.fit(np.log(p / (1 - p)).reshape(-1, 1), y.ravel())
        assert line.intercept_[0] == pytest.approx(0, abs=1e-5)
        assert line.coef_[0, 0] == pytest.approx(1, abs=1e-5)
        assert p.mean() == pytest.approx(y.mean(), rel=1e-4)


def test_ranges_hold_nearly_all_the_rows(rows, fitted):
    assert tuple(fitted.ranges) == tuple(FEATURES)
    seas, _ = split_seas(rows, SETTINGS)
    taught = rows.rows(np.isin(rows.sea, seas))
    # the distances asked of the seas as drawn, whatever kp each record has
    assert fitted.ranges["distance_wavelengths"] == (0.0, 12.5)
    for name in set(fitted.ranges) - {"distance_wavelengths"}:
        low, high = fitted.ranges[name]
        inside = (taught.column(name) >= low) & (taught.column(name) <= high)
        assert inside.mean() > 0.99, name


def test_a_fit_on_fewer_features_and_one_criterion(rows):
    names = ("steepness", "distance_wavelengths", "lead_periods", "coverage", "run_height")
    said = []
    model = fit(
        rows, SETTINGS, name="less", version="1", names=names, criteria=("height",),
        progress=said.append,
    )  # fmt: skip
    assert tuple(model.heads) == ("height",)
    assert model.heads["height"].names == names
    assert said == [
        "height: 2 bags on 9 seas", "height: calibration on 3 seas",
    ]  # fmt: skip
    small = model.intervals(np.ones((2, 5), np.float32), names, [1.0, 2.0]).probability
    assert small.shape == (2, 2)


def test_what_the_run_says_is_learnt(rows):
    # a wave that the run sees coming is more likely to come
    seas = split_seas(rows, SETTINGS)
    fitted_rows, held = (rows.rows(np.isin(rows.sea, part)) for part in seas)
    head = fit_head(fitted_rows, held, "height", SETTINGS, names=rows.names)
    model = replace(tiny_model.model(), heads={"height": head})
    near = held.rows((held.column("coverage") > 0.8) & (held.column("distance_wavelengths") > 0))
    p = model.intervals(near.features, near.names, [1.4]).probability[:, 0]
    happened = near.height >= 1.4
    assert happened.sum() >= 3
    assert p[happened].mean() > 2 * p[~happened].mean()
