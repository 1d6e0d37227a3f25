"""Scores of probability forecasts, against published values, closed forms and scikit-learn."""

from math import inf, log, nan

import numpy as np
import pytest
import scipy.optimize
import scipy.stats
import sklearn.isotonic
import sklearn.linear_model
import sklearn.metrics
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from forecaster.errors import InputError, NumericsError
from forecaster.learning.scores import (
    bootstrap_by_group,
    bootstrap_difference,
    brier_score,
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

SCORES = (
    brier_score,
    brier_skill,
    isotonic_decomposition,
    logarithmic_score,
    log_skill,
    mean_bias,
    calibration_line,
    roc_area,
    precision_recall_area,
)
NEED_BOTH_OUTCOMES = (brier_skill, log_skill, calibration_line, roc_area, precision_recall_area)


def stratified():
    """Forecasts of few issued values, from a table (p, rows, events)."""
    table = [(0.0, 50, 1), (0.1, 30, 4), (0.3, 20, 5), (0.6, 10, 7), (0.9, 10, 9)]
    p = np.concatenate([np.full(n, p) for p, n, _ in table])
    y = np.concatenate([np.arange(n) < events for _, n, events in table]).astype(int)
    return p, y


def sample(n=2000, seed=3, *, digits=None, intercept=0.0, slope=1.0):
    """Forecasts with known calibration line; rounded to `digits` for ties."""
    generator = np.random.default_rng(seed)
    logit = generator.normal(-1.5, 1.2, n)
    p = 1 / (1 + np.exp(-logit))
    y = (generator.random(n) < 1 / (1 + np.exp(-(intercept + slope * logit)))).astype(int)
    return (p if digits is None else np.clip(np.round(p, digits), 0.01, 0.99)), y


# --- input ---


@pytest.mark.parametrize("score", SCORES)
@pytest.mark.parametrize(
    ("p", "y", "weights", "message"),
    [
        ([0.1, 1.1], [0, 1], None, r"0\.\.1, got values from .*0.1.* to .*1.1"),
        ([0.1, -0.1], [0, 1], None, r"0\.\.1"),
        ([0.1, nan], [0, 1], None, r"0\.\.1"),
        ([0.1, 0.2], [0, 2], None, "0 or 1, got .*2"),
        ([0.1, 0.2], [0, nan], None, "0 or 1"),
        ([0.1, 0.2], [0, 1, 1], None, "one length"),
        ([], [], None, "not empty"),
        ([[0.1, 0.2]], [[0, 1]], None, "rows of one length"),
        ([0.1, 0.2], [0, 1], [1], "shape"),
        ([0.1, 0.2], [0, 1], [1, -1], "below zero"),
        ([0.1, 0.2], [0, 1], [0, 0], "all zero"),
        ([0.1, 0.2], [0, 1], [1, nan], "finite"),
        ([0.1, 0.2], [0, 1], [1, inf], "finite"),
    ],
)
def test_input_that_is_no_forecast_is_refused(score, p, y, weights, message):
    with pytest.raises(InputError, match=message):
        score(p, y, weights=weights)


@pytest.mark.parametrize("score", NEED_BOTH_OUTCOMES)
@pytest.mark.parametrize(("y", "weights"), [([0, 0], None), ([1, 1], None), ([0, 1], [1, 0])])
def test_score_without_events_or_non_events_is_refused(score, y, weights):
    with pytest.raises(NumericsError, match="at least one event and one non-event"):
        score([0.2, 0.3], y, weights=weights)


@pytest.mark.parametrize("score", SCORES)
@pytest.mark.parametrize("digits", [None, 1])
def test_whole_weight_counts_as_so_many_rows(score, digits):
    # exact: by definition of the weights
    p, y = sample(300, digits=digits)
    weights = np.random.default_rng(1).integers(0, 4, p.size)
    repeated = score(np.repeat(p, weights), np.repeat(y, weights))
    np.testing.assert_allclose(score(p, y, weights=weights), repeated, rtol=1e-9, atol=1e-12)


# --- scores ---


def test_brier_score_of_a_worked_example():
    # published: scikit-learn documentation of brier_score_loss (data from memory); by hand:
    # (0.01 + 0.01 + 0.04 + 0.09) / 4
    assert brier_score([0.1, 0.9, 0.8, 0.3], [0, 1, 1, 0]) == pytest.approx(0.0375, abs=1e-12)


def test_decomposition_of_a_table():
    # exact: Murphy 1973 applied to a table made for this test, worked outside the program; the
    # shares of events grow with the issued values, so that no pooling changes its parts
    parts = isotonic_decomposition(*stratified())
    expected = (0.095, 0.00169444, 0.07641667, 0.16972222)
    assert parts == pytest.approx(expected, abs=1e-8)
    assert brier_skill(*stratified()) == pytest.approx(0.44026, abs=1e-5)


@given(
    st.integers(1, 40).flatmap(
        lambda n: st.tuples(
            hnp.arrays(float, n, elements=st.sampled_from([0, 0.1, 0.25, 0.6, 1])),
            hnp.arrays(int, n, elements=st.integers(0, 1)),
            hnp.arrays(float, n, elements=st.floats(0.1, 5)),
        )
    )
)
def test_decomposition_adds_up(rows):
    # exact: Dimitriadis, Gneiting & Jordan 2021
    p, y, weights = rows
    score, minus, plus, uncertainty = isotonic_decomposition(p, y, weights=weights)
    assert score == pytest.approx(np.average((p - y) ** 2, weights=weights), abs=1e-12)
    assert minus - plus + uncertainty == pytest.approx(score, abs=1e-12)
    assert min(minus, plus) >= -1e-12
    # recalibration that may be any function of p does at least as well as a monotone one: exact,
    # by the reliability of Murphy 1973
    _, index = np.unique(p, return_inverse=True)
    rates = np.bincount(index, weights * y) / np.bincount(index, weights)
    assert np.average((p - rates[index]) ** 2, weights=weights) >= minus - 1e-12


def test_climatology_has_no_skill_and_only_uncertainty():
    # exact: base rate 0.033 gives UNC = 0.033 x 0.967 = 0.031911
    y = np.arange(1000) < 33
    p = np.full(1000, 0.033)
    assert isotonic_decomposition(p, y) == pytest.approx((0.031911, 0, 0, 0.031911), abs=1e-12)
    assert brier_skill(p, y) == pytest.approx(0, abs=1e-12)
    assert log_skill(p, y) == pytest.approx(0, abs=1e-12)
    assert roc_area(p, y) == 0.5
    assert precision_recall_area(p, y) == pytest.approx(0.033)


def test_isotonic_decomposition_matches_scikit_learn():
    # independent code: scikit-learn isotonic regression and Brier score
    p, y = sample(slope=0.6)
    fitted = sklearn.isotonic.IsotonicRegression().fit_transform(p, y)
    recalibrated = sklearn.metrics.brier_score_loss(y, fitted)
    issued = sklearn.metrics.brier_score_loss(y, p)
    climatology = y.mean() * (1 - y.mean())
    expected = (issued, issued - recalibrated, climatology - recalibrated, climatology)
    assert isotonic_decomposition(p, y) == pytest.approx(expected, abs=1e-12)


def test_logarithmic_score_by_hand_and_by_scikit_learn():
    # by hand: -(ln 0.5 + ln 0.75) / 2
    assert logarithmic_score([0.5, 0.25], [1, 0]) == pytest.approx((log(2) + log(4 / 3)) / 2)
    p, y = sample()
    weights = np.random.default_rng(1).random(p.size)
    expected = sklearn.metrics.log_loss(y, p, sample_weight=weights)  # independent code
    assert logarithmic_score(p, y, weights=weights) == pytest.approx(expected, rel=1e-12)


def test_event_that_was_called_impossible_costs_everything():
    assert logarithmic_score([0.0, 0.5], [1, 0]) == inf
    assert log_skill([0.0, 0.5], [1, 0]) == -inf
    assert logarithmic_score([0.0, 1.0], [0, 1]) == 0
    assert logarithmic_score([0.0, 0.5], [1, 0], weights=[0, 1]) == pytest.approx(log(2))


def test_bias_is_positive_when_too_much_is_forecast():
    assert mean_bias([0.5, 0.7], [0, 0]) == pytest.approx(0.6)  # by hand
    assert mean_bias([0.5, 0.7], [0, 1], weights=[1, 3]) == pytest.approx(0.65 - 0.75)


# --- isotonic fit ---


@pytest.mark.parametrize(
    ("values", "expected"),
    [
        # by hand (Ayer et al. 1955)
        ([1, 0, 1, 0, 1, 1], [0.5, 0.5, 0.5, 0.5, 1, 1]),
        ([3, 2, 1], [2, 2, 2]),
        ([1, 2, 3], [1, 2, 3]),
        ([1, 2, 3, -6], [0, 0, 0, 0]),
        ([5], [5]),
        ([], []),
    ],
)
def test_pooling_by_hand(values, expected):
    assert pool_adjacent_violators(values).tolist() == expected


@given(
    st.integers(1, 60).flatmap(
        lambda n: st.tuples(
            hnp.arrays(float, n, elements=st.integers(-5, 5)),
            hnp.arrays(float, n, elements=st.integers(1, 9)),
        )
    )
)
def test_pooling_matches_scipy_and_keeps_the_mean(rows):
    values, weights = rows
    fitted = pool_adjacent_violators(values, weights=weights)
    # independent code: scipy.optimize.isotonic_regression
    expected = scipy.optimize.isotonic_regression(values, weights=weights).x
    np.testing.assert_allclose(fitted, expected, atol=1e-12)
    assert (np.diff(fitted) >= -1e-12).all()
    assert fitted @ weights == pytest.approx(values @ weights, abs=1e-9)  # exact


@pytest.mark.parametrize("last", [-1e9, 0.0, 5e4])
def test_pooling_a_long_row_whose_last_value_undoes_it(last):
    # the worst case for merging run by run: every merge makes one new pair out of order
    values = np.append(np.arange(1e5), last)
    expected = scipy.optimize.isotonic_regression(values).x
    np.testing.assert_allclose(pool_adjacent_violators(values), expected, rtol=1e-9)


def test_pooling_refuses_what_it_cannot_order():
    for values, weights in (([1, nan], None), ([[1, 2]], None), ([1, 2], [1, 0]), ([1], [1, 1])):
        with pytest.raises(InputError):
            pool_adjacent_violators(values, weights=weights)


# --- calibration line ---


@pytest.mark.parametrize("weighted", [False, True])
def test_calibration_line_matches_scikit_learn(weighted):
    # independent code: scikit-learn logistic regression without penalty
    p, y = sample(intercept=-0.4, slope=0.7)
    weights = np.random.default_rng(1).random(p.size) if weighted else None
    logit = np.log(p / (1 - p))
    model = sklearn.linear_model.LogisticRegression(C=inf, tol=1e-12, max_iter=1000)
    model.fit(logit[:, None], y, sample_weight=weights)
    intercept, slope = calibration_line(p, y, weights=weights)
    assert intercept == pytest.approx(model.intercept_[0], abs=1e-6)
    assert slope == pytest.approx(model.coef_[0, 0], abs=1e-6)


def test_calibration_line_of_two_issued_values_is_exact():
    # exact: with two issued values the line runs through both observed log odds
    p = np.repeat([0.2, 0.6], 20)
    y = np.r_[np.arange(20) < 2, np.arange(20) < 15]
    slope = (log(15 / 5) - log(2 / 18)) / (log(0.6 / 0.4) - log(0.2 / 0.8))
    intercept = log(15 / 5) - slope * log(0.6 / 0.4)
    assert calibration_line(p, y) == pytest.approx((intercept, slope), abs=1e-9)


@given(st.floats(-3, 3), st.floats(0.05, 3))
@settings(max_examples=40)
def test_calibration_line_follows_a_relabelling_of_the_forecasts(shift, stretch):
    # exact: logit' = shift + stretch x logit gives slope / stretch
    p, y = sample(300, intercept=-0.4, slope=0.7)
    other = 1 / (1 + np.exp(-(shift + stretch * np.log(p / (1 - p)))))
    intercept, slope = calibration_line(p, y)
    other_intercept, other_slope = calibration_line(other, y)
    assert other_slope * stretch == pytest.approx(slope, rel=1e-6)
    assert other_intercept + other_slope * shift == pytest.approx(intercept, abs=1e-6)


def test_calibration_line_where_it_does_not_exist():
    with pytest.raises(InputError, match="exactly 0 or 1"):
        calibration_line([0.0, 0.5], [0, 1])
    with pytest.raises(NumericsError, match="same logit"):
        calibration_line([0.3, 0.3, 0.3], [0, 1, 0])
    for y in ([0, 0, 1], [1, 0, 0]):
        with pytest.raises(NumericsError, match="separate"):
            calibration_line([0.2, 0.3, 0.3 if y[0] else 0.4], y)
    with pytest.raises(NumericsError, match="separate"):  # sharing only the value in between
        calibration_line([0.2, 0.3, 0.3, 0.4], [0, 0, 1, 1])


def test_calibration_line_settles_from_forecasts_far_off():
    # exact: symmetric data, so the slope brings logit(p) to the log odds 3:1 = ln 3
    p = np.repeat([1e-15, 1 - 1e-15], 4)
    y = [1, 0, 0, 0, 0, 1, 1, 1]
    logit = np.log(p) - np.log1p(-p)
    intercept, slope = calibration_line(p, y)
    assert intercept + slope * logit[0] == pytest.approx(-log(3), abs=1e-9)
    assert intercept + slope * logit[-1] == pytest.approx(log(3), abs=1e-9)


# --- reliability ---


def test_reliability_counts_by_hand_and_intervals_by_scipy():
    p = np.r_[np.full(40, 0.1), np.full(20, 0.3), np.full(10, 0.8)]
    y = np.r_[np.arange(40) < 6, np.arange(20) < 5, np.arange(10) < 10]
    curve = reliability_curve(p, y, bins=[0, 0.2, 0.5, 0.6, 1], level=0.9)
    assert curve.rows.tolist() == [40, 20, 10]  # the empty bin is left out
    assert curve.events.tolist() == [6, 5, 10]
    assert curve.forecast == pytest.approx([0.1, 0.3, 0.8])
    assert curve.observed == pytest.approx([0.15, 0.25, 1])
    for i, (n, events) in enumerate([(40, 6), (20, 5), (10, 10)]):
        # independent code: Wilson's interval and binomial quantiles of scipy.stats
        wilson = scipy.stats.binomtest(events, n).proportion_ci(0.9, method="wilson")
        assert (curve.observed_low[i], curve.observed_high[i]) == pytest.approx(tuple(wilson))
        quantiles = scipy.stats.binom.ppf([0.05, 0.95], n, curve.forecast[i]) / n
        assert (curve.consistent_low[i], curve.consistent_high[i]) == pytest.approx(quantiles)


@pytest.mark.parametrize("n", [1, 7, 1000, 200_000])
@pytest.mark.parametrize("p", [1e-6, 0.02, 0.5, 0.999])
def test_consistency_interval_matches_scipy(n, p):
    # independent code: scipy.stats.binom
    curve = reliability_curve(np.full(n, p), np.arange(n) == 0, bins=1, level=0.95)
    expected = scipy.stats.binom.ppf([0.025, 0.975], n, p) / n
    assert (curve.consistent_low[0], curve.consistent_high[0]) == pytest.approx(expected)


def test_bins_of_equal_numbers_keep_ties_together():
    p, y = sample(1000)
    curve = reliability_curve(p, y, bins=8)
    assert curve.rows.tolist() == [125] * 8
    assert curve.rows @ curve.forecast == pytest.approx(p.sum())
    assert curve.events.sum() == y.sum()
    for p, rows in (([0.1] * 9 + [0.5], [9, 1]), ([0.1] + [0.5] * 9, [1, 9])):
        assert reliability_curve(p, [0] * 10, bins=4).rows.tolist() == rows


def test_certain_forecasts_have_a_reliability():
    curve = reliability_curve([0.0, 0.0, 1.0], [0, 1, 1], bins=[0, 0.5, 1])
    assert curve.consistent_low.tolist() == curve.consistent_high.tolist() == [0, 1]
    assert curve.observed.tolist() == [0.5, 1]


def test_equal_weights_change_nothing_and_unequal_ones_widen():
    p, y = np.full(100, 0.3), np.arange(100) < 30
    plain = reliability_curve(p, y, bins=1)
    equal = reliability_curve(p, y, bins=1, weights=np.full(100, 7.0))
    assert equal.observed_low == pytest.approx(plain.observed_low)
    uneven = reliability_curve(p, y, bins=1, weights=np.tile([1.0, 9.0], 50))
    # by hand: Kish's number is 500^2 / (50 + 50 x 81) = 60.98, a share of 0.3 as before
    quantiles = scipy.stats.binom.ppf([0.05, 0.95], 61, 0.3) / 61
    assert (uneven.consistent_low[0], uneven.consistent_high[0]) == pytest.approx(quantiles)
    wilson = scipy.stats.binomtest(30, 100).proportion_ci(0.9, method="wilson")
    assert plain.observed_high[0] == pytest.approx(wilson.high)
    assert uneven.observed_high[0] - uneven.observed_low[0] > wilson.high - wilson.low


@pytest.mark.parametrize("bins", [0, 2.5, [0, 1, 0.5], [0.1, 1], [0, 0.9], [0, 0, 1], [0]])
def test_bins_that_make_no_sense_are_refused(bins):
    with pytest.raises(InputError, match="bins"):
        reliability_curve([0.1, 0.2], [0, 1], bins=bins)


def test_level_outside_0_to_1_is_refused():
    with pytest.raises(InputError, match="level"):
        reliability_curve([0.1, 0.2], [0, 1], level=90)


# --- discrimination ---


@pytest.mark.parametrize("digits", [None, 1])
@pytest.mark.parametrize("weighted", [False, True])
def test_areas_match_scikit_learn(digits, weighted):
    # independent code: scikit-learn
    p, y = sample(digits=digits)
    weights = np.random.default_rng(1).random(p.size) if weighted else None
    roc = sklearn.metrics.roc_auc_score(y, p, sample_weight=weights)
    precision_recall = sklearn.metrics.average_precision_score(y, p, sample_weight=weights)
    assert roc_area(p, y, weights=weights) == pytest.approx(roc, abs=1e-12)
    assert precision_recall_area(p, y, weights=weights) == pytest.approx(
        precision_recall, abs=1e-12
    )


@given(
    st.integers(2, 25).flatmap(
        lambda n: st.tuples(
            hnp.arrays(float, n, elements=st.sampled_from([0.1, 0.2, 0.3, 0.4])),
            hnp.arrays(int, n, elements=st.integers(0, 1)),
        )
    )
)
def test_roc_area_is_the_share_of_pairs_in_order(rows):
    # exact: Mann-Whitney statistic, counted pair by pair
    p, y = rows
    assume(0 < y.mean() < 1)
    pairs = p[y == 1][:, None] - p[y == 0][None, :]
    assert roc_area(p, y) == pytest.approx(((pairs > 0) + 0.5 * (pairs == 0)).mean())
    assert roc_area(1 - p, y) == pytest.approx(1 - roc_area(p, y))


# --- bootstrap ---


def seas(number=60, per_sea=40, seed=8):
    """Rows that share a sea share a shift of the log odds that the forecast does not know."""
    generator = np.random.default_rng(seed)
    groups = np.repeat(np.arange(number), per_sea)
    logit = generator.normal(-1, 1, groups.size)
    shift = generator.normal(0, 0.8, number)[groups]
    y = generator.random(groups.size) < 1 / (1 + np.exp(-logit - shift))
    return 1 / (1 + np.exp(-logit)), y.astype(int), groups


def test_bootstrap_matches_one_that_copies_rows():
    # independent way: the same draws, whole seas copied row by row, plain scores
    p, y, groups = seas(20, 30)
    functions = {"brier": brier_score, "roc": roc_area, "line": calibration_line}
    result = bootstrap_by_group(
        functions, p, y, groups, generator=np.random.default_rng(4), replicates=41, level=0.8
    )
    draws = np.random.default_rng(4).multinomial(20, np.full(20, 1 / 20), 41)
    copies = [
        np.concatenate([np.flatnonzero(groups == g) for g in np.repeat(np.arange(20), draw)])
        for draw in draws
    ]
    for name, score in (("brier", brier_score), ("roc", roc_area)):
        resampled = sorted(score(p[rows], y[rows]) for rows in copies)
        expected = (score(p, y), resampled[4], resampled[36], 41, 0)
        assert result[name] == pytest.approx(expected, rel=1e-9)
    slopes = sorted(calibration_line(p[rows], y[rows]).slope for rows in copies)
    assert result["line.slope"][1:3] == pytest.approx((slopes[4], slopes[36]), rel=1e-7)
    assert list(result) == ["brier", "roc", "line.intercept", "line.slope"]


def test_interval_of_the_mean_bias_has_the_spread_of_sea_means():
    # exact: for seas of equal size the mean bias is a mean of independent sea means, so its
    # standard error is known; a 90 % interval is 2 x 1.645 standard errors wide
    p, y, groups = seas(400, 25)
    result = bootstrap_by_group(
        {"bias": mean_bias}, p, y, groups, generator=np.random.default_rng(1), replicates=3000
    )["bias"]
    sea_means = (p - y).reshape(400, 25).mean(axis=1)
    width = 2 * 1.6449 * sea_means.std() / np.sqrt(400)
    assert result.high - result.low == pytest.approx(width, rel=0.06)
    row_width = 2 * 1.6449 * (p - y).std() / np.sqrt(p.size)
    assert width > 1.3 * row_width  # rows taken as independent would look surer than they are


def test_order_and_names_of_seas_do_not_matter():
    p, y, groups = seas(20, 30)
    names = np.array([f"sea {g:02d}" for g in groups])
    order = np.random.default_rng(2).permutation(p.size)
    first = bootstrap_by_group(
        {"roc": roc_area}, p, y, groups, generator=np.random.default_rng(4), replicates=30
    )
    second = bootstrap_by_group(
        {"roc": roc_area},
        p[order],
        y[order],
        names[order],
        generator=np.random.default_rng(4),
        replicates=30,
    )
    assert first["roc"] == pytest.approx(second["roc"])


def test_resamples_without_events_are_skipped_and_counted():
    # by hand: only sea 0 has events; it is missing from a resample of 3 with (2/3)^3 = 0.296
    p, y = np.tile([0.1, 0.3, 0.6], 3), np.array([0, 1, 1] + [0] * 6)
    result = bootstrap_by_group(
        {"roc": roc_area, "brier": brier_score},
        p,
        y,
        np.repeat([0, 1, 2], 3),
        generator=np.random.default_rng(6),
        replicates=2000,
    )
    assert result["roc"].skipped / 2000 == pytest.approx(8 / 27, abs=0.03)
    assert result["roc"].replicates + result["roc"].skipped == 2000
    assert result["brier"].skipped == 0


def test_score_defined_on_no_resample_is_refused():
    calls = []

    def only_whole(p, y, *, weights=None):
        calls.append(weights)
        if weights is not None:
            raise NumericsError("no")
        return 1.0

    with pytest.raises(NumericsError, match="any of 5 resamples"):
        bootstrap_by_group(
            {"x": only_whole},
            [0.1, 0.2],
            [0, 1],
            [0, 1],
            generator=np.random.default_rng(0),
            replicates=5,
        )
    assert len(calls) == 6


def test_infinite_scores_leave_infinite_limits():
    p, y, groups = [0.0, 0.5, 0.5, 0.5], [1, 0, 1, 0], [0, 0, 1, 1]
    result = bootstrap_by_group(
        {"log": logarithmic_score}, p, y, groups, generator=np.random.default_rng(0)
    )["log"]
    assert (result.value, result.high) == (inf, inf)
    assert result.low == pytest.approx(log(2))  # by hand: sea 0 drawn in 3 of 4 resamples


def test_difference_is_paired():
    p, y, groups = seas()
    worse = np.clip(p + 0.15, 0, 1)
    gain = bootstrap_difference(
        brier_score, p, worse, y, groups, generator=np.random.default_rng(1), replicates=400
    )
    assert gain.value == pytest.approx(brier_score(p, y) - brier_score(worse, y))
    assert gain.low < gain.value < gain.high < 0
    single = bootstrap_by_group(
        {"brier": brier_score}, p, y, groups, generator=np.random.default_rng(1), replicates=400
    )["brier"]
    assert gain.high - gain.low < single.high - single.low  # what both share cancels
    same = bootstrap_difference(
        roc_area, p, p, y, groups, generator=np.random.default_rng(1), replicates=20
    )
    assert same == (0, 0, 0, 20, 0)


def test_difference_matches_one_that_copies_rows():
    p, y, groups = seas(20, 30)
    other = p[::-1].copy()
    result = bootstrap_difference(
        roc_area, p, other, y, groups, generator=np.random.default_rng(4), replicates=21
    )
    draws = np.random.default_rng(4).multinomial(20, np.full(20, 1 / 20), 21)
    differences = []
    for draw in draws:
        rows = np.concatenate([np.flatnonzero(groups == g) for g in np.repeat(np.arange(20), draw)])
        differences.append(roc_area(p[rows], y[rows]) - roc_area(other[rows], y[rows]))
    assert result[1:3] == pytest.approx((sorted(differences)[1], sorted(differences)[19]))


def test_same_seed_same_intervals():
    p, y, groups = seas(20, 30)
    first, second = (
        bootstrap_by_group(
            {"skill": log_skill}, p, y, groups, generator=np.random.default_rng(9), replicates=20
        )
        for _ in range(2)
    )
    assert first == second


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"groups": [1, 1, 1]}, "two groups"),
        ({"groups": [1, 2]}, "shape"),
        ({"replicates": 0}, "replicates"),
        ({"level": 90}, "level"),
    ],
)
def test_bootstrap_that_makes_no_sense_is_refused(change, message):
    arguments = {"groups": [1, 2, 2], "replicates": 5, "level": 0.9, **change}
    with pytest.raises(InputError, match=message):
        bootstrap_by_group(
            {"brier": brier_score},
            [0.1, 0.2, 0.3],
            [0, 1, 0],
            generator=np.random.default_rng(0),
            **arguments,
        )
