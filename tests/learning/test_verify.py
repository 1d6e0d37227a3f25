"""Verification tables against outcomes made to order, and against general-purpose code."""

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from sklearn.isotonic import IsotonicRegression
from sklearn.metrics import log_loss, roc_auc_score

from forecaster.learning import verify as verification
from forecaster.learning.features import FEATURES
from forecaster.learning.verify import (
    ABLATIONS,
    FEATURE_SETS,
    PLAIN_ABLATIONS,
    ablation,
    barely_measured_rows,
    baseline_table,
    forecast_rows,
    horizon_table,
    model_table,
    monotone_calibration,
    score_row,
    verify,
)
from tests import tiny_model

RATIO = 1.2


@pytest.fixture(scope="module", autouse=True)
def few_replicates():
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(verification, "REPLICATES", 20)
        yield


@pytest.fixture(scope="module")
def seas():
    """The tiny seas, with a stand-in for the plain run: the height it is to tell, and noise."""
    data = tiny_model.dataset()
    noise = np.random.default_rng(4).normal(0, 0.3, data.plain_run.shape)
    return replace(data, plain_run=(data.height[:, None] + noise).astype(np.float32))


def test_the_feature_sets_of_the_ablation_hold_every_feature_once():
    listed = [name for part in ABLATIONS["all"] for name in FEATURE_SETS[part]]
    assert sorted(listed) == sorted(FEATURES)


def test_forecast_rows_are_half_measured_or_at_the_sensor(seas):
    shown = forecast_rows(seas)
    downwave = shown.column("distance_wavelengths") > 0
    assert (shown.column("coverage")[downwave] >= 0.5).all()
    assert (~downwave).sum() == (seas.column("distance_wavelengths") == 0).sum()


def test_barely_measured_rows_are_those_a_forecast_does_not_show(seas):
    beyond = barely_measured_rows(seas).column("coverage")
    assert beyond.size and beyond.min() >= 0.2 and beyond.max() < 0.5
    # by hand: the two masks share no row
    shown = forecast_rows(seas)
    assert beyond.size + shown.height.size <= seas.height.size


def test_scores_of_a_row_equal_general_purpose_code(seas):
    generator = np.random.default_rng(0)
    p = generator.uniform(0.05, 0.95, 4000)
    y = generator.uniform(size=4000) < p
    sea = np.repeat(np.arange(40), 100)
    row = score_row("made", p, y, sea, generator=generator, replicates=50)
    # independent code: scikit-learn
    climatology = log_loss(y, np.full(y.size, y.mean()))
    assert row.scores["log skill"][0] == pytest.approx(1 - log_loss(y, p) / climatology, rel=1e-9)
    assert row.scores["ROC"][0] == pytest.approx(roc_auc_score(y, p), rel=1e-9)
    # by construction p is calibrated: the line's slope is 1 within its own interval and a little
    slope, low, high = row.scores["line.slope"]
    assert low < slope < high and abs(slope - 1) < 0.15
    assert (row.seas, row.cases, row.events) == (40, 4000, int(y.sum()))


def test_a_row_without_events_is_counted_and_not_scored():
    p, sea = np.full(50, 0.1), np.repeat([0, 1], 25)
    row = score_row("none", p, np.zeros(50), sea, generator=np.random.default_rng(0))
    assert row.scores == {} and (row.cases, row.events, row.seas_with_events) == (50, 0, 0)


def test_monotone_calibration_equals_isotonic_regression():
    generator = np.random.default_rng(1)
    x = generator.normal(size=600).round(2)
    y = generator.uniform(size=600) < 1 / (1 + np.exp(-2 * x))
    ours = monotone_calibration(x, y)(np.unique(x))
    # independent code: scikit-learn pools tied x first; the blocks agree but for the ties
    theirs = IsotonicRegression(out_of_bounds="clip").fit(x, y).predict(np.unique(x))
    assert np.abs(ours - theirs).mean() < 0.02
    assert all(b >= a for a, b in pairwise(ours))


def test_tables_cover_all_rows_and_split_them_without_loss(seas):
    model = tiny_model.model()
    rows = model_table(model, seas, RATIO, generator=np.random.default_rng(0))
    pooled = rows[0]
    assert pooled.cases == len(forecast_rows(seas).height)
    by_distance = [row for row in rows if row.label.endswith("wavelengths")]
    assert sum(row.cases for row in by_distance) == pooled.cases
    assert sum(row.events for row in by_distance) == pooled.events > 0


def test_a_horizon_is_one_case_with_an_event_if_any_interval_has_one(seas):
    rows = horizon_table(tiny_model.model(), seas, RATIO, generator=np.random.default_rng(0))
    shown = forecast_rows(seas)
    keys = {}
    for sea, record, distance, height in zip(
        shown.sea, shown.record, shown.distance, shown.height, strict=True
    ):
        key = (int(sea), int(record), float(distance))
        keys[key] = keys.get(key, False) or bool(height >= RATIO)
    assert (rows[0].cases, rows[0].events) == (len(keys), sum(keys.values()))


def test_baselines_are_compared_and_an_informed_one_beats_climatology(seas):
    table = baseline_table(
        tiny_model.model(), seas, seas, RATIO, generator=np.random.default_rng(0)
    )
    skill = {row["baseline"]: row["log_skill"] for row in table}
    assert set(skill) == {
        "climatology", "predictive base rate", "Mori-Janssen with BFI", "linear forward run",
        "kurtosis and largest wave", "Dysthe forward run",
    }  # fmt: skip
    # the climatology of the same rows has no skill by definition (Murphy 1973)
    assert skill["climatology"] == pytest.approx(0, abs=1e-9)
    assert skill["Dysthe forward run"] > skill["linear forward run"] > skill["climatology"]


def test_without_the_plain_run_its_baseline_is_left_out(seas):
    blind = replace(seas, plain_run=np.full_like(seas.plain_run, np.nan))
    table = baseline_table(
        tiny_model.model(), blind, blind, RATIO, generator=np.random.default_rng(0)
    )
    assert "Dysthe forward run" not in {row["baseline"] for row in table}


def test_verify_is_ready_for_json_and_skips_what_has_no_events(seas):
    measured = verify(
        tiny_model.model(), seas, elsewhere={"again": seas}, taught=seas, ratios=(RATIO, 2.8)
    )
    # the same seas elsewhere: the same cases
    again = measured["elsewhere"]["again"]["1.2"][0]
    assert again["cases"] == measured["ratios"]["1.2"]["intervals"][0]["cases"]
    assert measured["ratios"]["1.2"]["baselines"]
    assert measured["ratios"]["1.2"]["intervals"][0]["events"] > 0
    rare = measured["ratios"]["2.8"]
    assert rare["intervals"][0]["events"] == 0 and "reliability" not in rare


@pytest.mark.slow
def test_an_ablation_fits_each_set_and_tells_gains(seas):
    table = ablation(
        seas,
        {"here": forecast_rows(seas)},
        tiny_model.SETTINGS,
        RATIO,
        generator=np.random.default_rng(0),
    )["here"]
    assert [row["features"] for row in table["sets"]] == [*ABLATIONS, *PLAIN_ABLATIONS]
    assert {name for row in table["sets"] for name in row["log_skill_by_coverage"]} <= {
        "0.5-0.8", "0.8-0.95", "0.95-1"
    }  # fmt: skip
    skill = {row["features"]: row["log_skill"][0] for row in table["sets"]}
    assert skill["+ forward run"] > skill["BFI and statistics"]
    assert skill["+ Dysthe run"] > skill["BFI and statistics"]
    assert {(gain["from"], gain["to"]) for gain in table["gains"]} == {
        ("BFI and statistics", "+ scattering"), ("+ forward run", "all"),
        ("+ Dysthe run", "+ Dysthe, scattering"),
    }  # fmt: skip
