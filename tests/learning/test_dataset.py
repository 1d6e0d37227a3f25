from dataclasses import replace

import numpy as np
import pytest

from forecaster.errors import InputError, NumericsError
from forecaster.learning import dataset as module
from forecaster.learning.dataset import (
    PLAIN_NAMES,
    VIEWS,
    Dataset,
    build,
    joined,
    member_rows,
    rows_hash,
    take_record,
)
from forecaster.learning.ensemble import PEAK_PERIOD, member_generator, simulate
from forecaster.learning.events import INTERVAL_PERIODS
from forecaster.learning.features import FEATURES
from forecaster.settings import SeaRecipe, SensorViews
from forecaster.waves.heights import zero_crossing_waves
from tests import tiny_model

VIEW = SensorViews(record_periods=(40.0, 60.0), noise=(0.01, 0.02), decimation=(1, 2))
ONE = SeaRecipe(
    engine="linear", members=3, root_seed=21, steepness=(0.05, 0.07), gamma=(3.0, 5.0),
    settling_periods=(10, 10), duration_periods=120, after_periods=40, gauges=5, sensors=1,
    distances_wavelengths=(0.0, 5.0, 10.0), views=VIEW,
)  # fmt: skip
DT = PEAK_PERIOD / 16


def arrays(rows):
    return {name: getattr(rows, name) for name in Dataset.__slots__ if name != "names"}


def assert_same(one, other):
    for name, values in arrays(one).items():
        assert np.array_equal(values, getattr(other, name), equal_nan=True), name


@pytest.fixture(scope="module")
def sea():
    return simulate(ONE, 0)


@pytest.fixture(scope="module")
def rows(sea):
    return member_rows(ONE, 0, sea, plain_records=1)


def the_record(sea):
    """The one record that `member_rows` takes of member 0."""
    record, _ = take_record(
        sea["elevation"][0].astype(float), float(sea["dt"]), ONE.views,
        member_generator(ONE.root_seed, 0, VIEWS), after=ONE.after_periods * PEAK_PERIOD,
    )  # fmt: skip
    return record


# --- records as a sensor delivers them ---


def taken(seed=4, n=20_000, **views):
    generator = np.random.default_rng(seed)
    elevation = np.array(tiny_model.sea_record(n=n, dt=DT, seed=3).elevation)
    record, clean = take_record(
        elevation, DT, SensorViews(record_periods=(1000.0, 1001.0), **views), generator, after=300.0
    )
    begin = round(record.start / DT)
    stored = elevation[begin : begin + round(record.duration / DT)]
    return record, clean, stored[:: round(record.dt / DT)][: record.n]


def test_a_clean_record_is_what_was_stored():
    record, clean, stored = taken(clean_share=1.0, noise=(0.1, 0.1), decimation=(3, 3))
    assert clean and record.dt == DT
    np.testing.assert_allclose(record.elevation, stored - stored.mean(), atol=1e-12)


def test_noise_has_the_share_asked_for():
    record, clean, stored = taken(noise=(0.05, 0.05))
    noise = record.elevation - (stored - stored.mean())
    # 4 standard errors of a standard deviation, 1/sqrt(2 n)
    share = noise.std() / (4 * stored.std())
    assert not clean
    assert share == pytest.approx(0.05, rel=4 / np.sqrt(2 * record.n))
    # white: neighbours do not correlate
    assert abs(np.corrcoef(noise[1:], noise[:-1])[0, 1]) < 4 / np.sqrt(record.n)


def test_decimation_keeps_every_so_many_samples():
    record, _, stored = taken(decimation=(3, 3))
    assert record.dt == pytest.approx(3 * DT)
    np.testing.assert_allclose(record.elevation, stored - stored.mean(), atol=1e-12)


def test_quantisation_leaves_whole_steps():
    record, _, stored = taken(quantisation=(0.02, 0.02))
    steps = np.diff(record.elevation) / (0.02 * 4 * stored.std())
    np.testing.assert_allclose(steps, np.round(steps), atol=1e-9)
    assert np.abs(record.elevation - stored).max() < 0.011 * 4 * stored.std() + abs(stored.mean())


def test_gaps_hold_the_share_asked_for_and_are_bridged():
    record, _, stored = taken(gap_share=0.05)
    changed = np.abs(record.elevation - (stored - stored.mean())) > 1e-9
    assert np.isfinite(record.elevation).all()
    assert changed.mean() == pytest.approx(0.05, abs=0.005)
    assert record.history[0] == "gaps made"
    assert "bridged" in record.history[-1]
    # by hand: no gap is longer than half a peak period, though two may touch
    edges = np.flatnonzero(np.diff(np.concatenate(([0], changed, [0]))))
    assert np.median(edges[1::2] - edges[::2]) * DT <= 0.5 * PEAK_PERIOD


def test_lengths_are_log_uniform_and_leave_time_for_outcomes():
    generator = np.random.default_rng(1)
    elevation = np.random.default_rng(2).standard_normal(5000)
    views = SensorViews(record_periods=(32.0, 128.0))
    ends, periods = [], []
    for _ in range(400):
        record, _ = take_record(elevation, DT, views, generator, after=600.0)
        ends.append(record.end)
        periods.append(record.duration / PEAK_PERIOD)
    assert max(ends) <= 5000 * DT - 600.0 + DT
    assert 31.9 < min(periods) and max(periods) < 128.1
    # by hand: half of them are below the geometric mean, 64 Tp; 4 standard errors
    assert abs((np.array(periods) < 64).mean() - 0.5) < 4 * 0.5 / np.sqrt(400)


# --- rows ---


def test_rows_are_deterministic(sea, rows):
    assert_same(rows, member_rows(ONE, 0, sea, plain_records=1))


def test_rows_hold_every_feature_and_only_numbers(rows):
    assert rows.names == tuple(FEATURES)
    assert rows.features.shape == (rows.height.size, len(FEATURES))
    assert rows.features.dtype == np.float32
    for name, values in arrays(rows).items():
        assert len(values) == rows.height.size, name
        assert np.isfinite(values).all(), name
    assert rows.height.size > 15


def test_what_happens_after_the_issue_time_changes_no_feature(sea, rows):
    issue = round(the_record(sea).end / DT)
    altered = {**sea, "elevation": sea["elevation"].copy()}
    altered["elevation"][:, issue + 1 :] *= -1.7
    after = member_rows(ONE, 0, altered, plain_records=1)
    assert rows.features.tobytes() == after.features.tobytes()
    assert rows.plain_run.tobytes() == after.plain_run.tobytes()
    assert not np.array_equal(rows.height, after.height)
    assert not np.array_equal(rows.crest, after.crest)


def test_the_last_sample_of_the_record_does_change_features(sea, rows):
    issue = round(the_record(sea).end / DT)
    altered = {**sea, "elevation": sea["elevation"].copy()}
    altered["elevation"][0, issue] += 0.5
    assert not np.array_equal(rows.features, member_rows(ONE, 0, altered).features)


@pytest.mark.parametrize("place", [0, 1, 2])
def test_outcomes_are_the_waves_at_the_target_after_the_issue_time(sea, rows, place):
    record = the_record(sea)
    distance = ONE.distances_wavelengths[place]
    chosen = rows.rows(rows.distance == distance)
    # Tp and Hs as the features have them; by hand: gauge = distance / 2.5 wavelengths
    elevation = sea["elevation"][round(distance / 2.5)].astype(float)
    waves = zero_crossing_waves(elevation, DT)
    hs = 4 * record.elevation.std()
    steepness = chosen.column("steepness")[0]
    tp = 2 * np.pi * np.sqrt(hs / (2 * steepness * 9.81))
    for lead, height, crest in zip(
        chosen.column("lead_periods"), chosen.height, chosen.crest, strict=True
    ):
        begin = record.end + lead * tp
        held = (waves.crest_time >= begin) & (waves.crest_time < begin + INTERVAL_PERIODS * tp)
        assert height == pytest.approx(waves.height[held].max() / hs, rel=1e-4)
        assert crest == pytest.approx(waves.crest[held].max() / hs, rel=1e-4)
    np.testing.assert_allclose(
        chosen.column("lead_periods"), 4 * np.arange(chosen.height.size), atol=1e-4
    )


def test_true_steepness_and_distance_are_those_of_the_sea_drawn(sea, rows):
    np.testing.assert_allclose(rows.true_steepness, sea["steepness"], rtol=1e-6)
    assert set(rows.distance.tolist()) == set(ONE.distances_wavelengths)
    # what the record says of itself is not quite the truth
    assert rows.column("steepness")[0] != rows.true_steepness[0]


def test_a_plain_run_is_computed_only_when_asked_for(sea, rows):
    assert np.isnan(member_rows(ONE, 0, sea).plain_run).all()
    # a sea of waves, followed where it is covered and at rest where it is not
    height = rows.plain_run[:, PLAIN_NAMES.index("plain_height")]
    assert height[rows.column("coverage") > 0.9].min() > 0.3
    assert height.max() < 3
    # not the run of the model itself, but near it
    of_the_model = rows.column("run_height")[rows.column("coverage") > 0.9]
    difference = np.abs(height[rows.column("coverage") > 0.9] - of_the_model)
    assert 0 < np.median(difference) < 0.2


def test_a_plain_run_is_computed_for_the_first_records_only(sea):
    recipe = replace(ONE, views=replace(VIEW, per_sensor=2))
    rows = member_rows(recipe, 0, sea, plain_records=1)
    assert set(rows.record.tolist()) == {0, 1}
    assert np.array_equal(np.isnan(rows.plain_run).all(axis=1), rows.record == 1)
    assert np.isfinite(rows.plain_run[rows.record == 0]).all()


def test_a_sensor_without_a_gauge_downwave_gives_no_rows_of_that_distance(sea):
    # by hand: gauges 0 .. 4, 2.5 wavelengths apart; sensors at 0 and 2; 7.5 is 3 gauges on
    recipe = replace(ONE, sensors=2, distances_wavelengths=(5.0, 7.5))
    rows = member_rows(recipe, 0, sea)
    assert set(rows.distance[rows.record == 0].tolist()) == {5.0, 7.5}
    assert set(rows.distance[rows.record == 1].tolist()) == {5.0}
    none = member_rows(replace(recipe, distances_wavelengths=(7.5,)), 0, sea)
    assert set(none.record.tolist()) == {0}


@pytest.mark.parametrize("error", [NumericsError("no"), InputError("too coarse")])
def test_a_record_that_cannot_be_looked_at_gives_no_rows(sea, monkeypatch, error):
    def refused(*args, **options):
        raise error

    monkeypatch.setattr(module, "look_ahead", refused)
    none = member_rows(ONE, 0, sea)
    assert none.height.size == 0
    assert none.features.shape == (0, len(FEATURES))


# --- several members ---


def test_joined_seas_and_records_are_never_confused(rows):
    both = joined([rows, rows, rows])
    assert np.unique(both.sea).size == 3
    for sea_number in range(3):
        assert_same(
            replace(both.rows(both.sea == sea_number), sea=rows.sea, record=rows.record), rows
        )
    assert np.unique(both.record).size == 3 * np.unique(rows.record).size


def test_members_without_rows_join(sea, rows, monkeypatch):
    none = rows.rows(np.zeros(rows.height.size, bool))
    assert joined([none, rows]).height.size == rows.height.size


def test_what_cannot_be_joined(rows):
    with pytest.raises(InputError, match="nothing to join"):
        joined([])
    with pytest.raises(InputError, match="different features"):
        joined([rows, replace(rows, names=rows.names[::-1])])


def test_build_keeps_what_is_finished_and_repairs_what_is_not(tmp_path, monkeypatch):
    first = build(ONE, tmp_path)
    assert np.unique(first.sea).size == ONE.members
    (folder,) = tmp_path.glob("rows-*")
    (folder / "member-000001.npz").unlink()
    made = []

    def noted(recipe, member, *rest, **options):
        made.append(member)
        return member_rows(recipe, member, *rest, **options)

    monkeypatch.setattr(module, "member_rows", noted)
    said = []
    again = build(ONE, tmp_path, progress=lambda *step: said.append(step))
    assert made == [1]
    assert said == [("seas", 3, 3), ("records", 2, 3), ("records", 3, 3)]
    assert_same(first, again)
    more = build(replace(ONE, members=4), tmp_path)
    assert made == [1, 3]
    assert_same(more.rows(more.sea < 3), first)


def test_rows_are_rebuilt_when_their_numbers_would_change():
    assert rows_hash(ONE, 0) == rows_hash(replace(ONE, members=9), 0)
    others = {
        rows_hash(ONE, 0),
        rows_hash(ONE, 1),
        rows_hash(replace(ONE, views=replace(VIEW, noise=(0.0, 0.02))), 0),
        rows_hash(replace(ONE, distances_wavelengths=(0.0, 5.0)), 0),
        rows_hash(replace(ONE, root_seed=1), 0),
    }
    assert len(others) == 5
