import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from forecaster.errors import RecordFormatError
from forecaster.records.grid import gap_history, uniform


def sine(times):
    return np.sin(2 * np.pi * times / 8)


@given(
    st.sampled_from([0.1, 0.25, 0.390625, 0.5, 0.78125, 1.0, 1.2]),
    st.floats(0, 2e9),
    st.integers(50, 400),
)
def test_exact_stamps_change_no_value(dt, start, n):
    values = sine(np.arange(n) * dt)
    grid = uniform(start + dt * np.arange(n), values, path="x")
    np.testing.assert_array_equal(grid.values, values)
    assert grid.dt == pytest.approx(dt, rel=1e-6)
    assert grid.start + (n - 1) * grid.dt == pytest.approx(start + dt * (n - 1), abs=1e-5)
    assert grid.history == ()


@pytest.mark.parametrize("start", [0.0, 1900000020.0])
@pytest.mark.parametrize(
    ("rate", "resolution", "rounding"),
    [
        (2.56, 0.1, np.round),  # a stamp printed to 0.1 s
        (4.0, 0.1, np.round),
        (4.0, 1.0, np.floor),  # whole seconds, four rows share each
        (1.28, 1.0, np.floor),
        (2.56, 1.0, np.floor),
        (1 / 1.2, 1.0, np.floor),  # lies on the lattice of 1 s with "gaps"
        (2.0, 60.0, np.floor),  # minutes only
    ],
)
def test_rounded_stamps_give_the_true_step(rate, resolution, rounding, start):
    n = 3000
    values = sine(np.arange(n) / rate)
    true = np.arange(n) / rate
    times = start + rounding(np.round(true / resolution, 9)) * resolution
    grid = uniform(times, values, path="x")
    np.testing.assert_array_equal(grid.values, values)
    assert grid.dt == pytest.approx(1 / rate, rel=1e-3 if resolution == 60 else 2e-5)
    assert grid.start + (n - 1) * grid.dt == pytest.approx(times[-1])  # ends at the last stamp
    assert "rounded to" in grid.history[0]


def test_round_step_is_preferred_where_the_stamps_cannot_tell():
    # by hand: 2.56 Hz is a step of 0.390625 s
    times = np.round(np.arange(2000) / 2.56, 1)
    assert uniform(times, sine(times), path="x").dt == 0.390625


@given(st.data())
@settings(max_examples=40)
def test_missing_rows_become_gaps_where_they_were(data):
    n = 200
    keep = np.ones(n, dtype=bool)
    for _ in range(data.draw(st.integers(1, 4))):
        first = data.draw(st.integers(2, n - 20))
        keep[first : first + data.draw(st.integers(1, 10))] = False
    dt = data.draw(st.sampled_from([0.5, 1.0, 0.390625]))
    times = 100.0 + dt * np.arange(n)
    values = sine(times)
    grid = uniform(times[keep], values[keep], path="x")
    assert grid.values.size == n
    np.testing.assert_array_equal(np.isnan(grid.values), ~keep)
    np.testing.assert_array_equal(grid.values[keep], values[keep])
    assert "left as gaps" in grid.history[-1]
    assert f"{(~keep).sum()} of {n} samples missing" in grid.history[-1]


def test_gap_between_rounded_stamps_keeps_its_length():
    true = np.arange(2000) / 2.56
    keep = np.ones(2000, dtype=bool)
    keep[700:956] = False  # by hand: 256 samples are 100 s
    times = np.round(true, 1)
    grid = uniform(times[keep], sine(true)[keep], path="x")
    np.testing.assert_array_equal(np.isnan(grid.values), ~keep)


def test_gap_of_whole_seconds_between_shared_stamps():
    true = np.arange(2400) / 4
    keep = (true < 200) | (true >= 250)
    grid = uniform(np.floor(true)[keep], sine(true)[keep], path="x")
    assert grid.dt == pytest.approx(0.25, rel=1e-4)
    assert abs(int(np.isnan(grid.values).sum()) - 200) <= 2


def test_jitter_is_resampled_within_measured_spans_only():
    rng = np.random.default_rng(7)
    dt, n = 0.5, 600
    times = dt * np.arange(n) + rng.uniform(-0.1, 0.1, n)
    keep = np.ones(n, dtype=bool)
    keep[200:240] = False
    grid = uniform(times[keep], sine(times)[keep], path="x")
    where = grid.start + grid.dt * np.arange(grid.values.size)
    inside = (where > times[199]) & (where < times[240])
    assert np.isnan(grid.values[inside]).all()
    measured = ~np.isnan(grid.values)
    assert measured.sum() >= n - 40 - 4
    # exact: the sine that was sampled; cubic spline at 16 points per period
    np.testing.assert_allclose(grid.values[measured], sine(where[measured]), atol=2e-3)
    assert "cubic spline within measured spans" in grid.history[0]
    assert where[-1] == pytest.approx(times[-1])


def test_short_spans_are_resampled_linearly_and_said():
    times = np.array([0, 0.55, 1.0, 1.52, 2.0, 2.47, 3.0, 10.0, 10.46, 11.1, 11.5, 12.0, 20, 20.55])
    grid = uniform(times, times, path="x")
    assert "linearly in 1 span(s)" in grid.history[0]
    where = grid.start + grid.dt * np.arange(grid.values.size)
    measured = ~np.isnan(grid.values)
    np.testing.assert_allclose(grid.values[measured], where[measured])  # exact: a straight line


def test_repeated_rows_are_dropped_and_said():
    times = np.array([0, 0.5, 1, 1, 1.5, 2, 2.5, 3, 3.5, 4, 4.5, 5.0, 5.5])
    values = np.array([0, 1, 2, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11.0])
    grid = uniform(times, values, path="x")
    assert grid.values.tolist() == list(range(12))
    assert grid.history == ("1 repeated row(s) with the same time and value dropped",)


def test_one_time_with_two_values_is_refused():
    times = np.array([0, 0.5, 1, 1, 1.5, 2, 2.5, 3, 3.5, 4, 4.5, 5.0, 5.5])
    values = np.arange(13.0)
    with pytest.raises(RecordFormatError, match=r"x, line 14: time 1 s is given twice.*2 and 3"):
        uniform(times, values, path="x", lines=np.arange(11, 24))


def test_a_step_that_contradicts_the_stamps_is_refused():
    times = np.arange(20) * 0.5
    with pytest.raises(RecordFormatError, match=r"step of 0.5 s but 0.25 s was given"):
        uniform(times, times, path="x", step=0.25)
    assert uniform(times, times, path="x", step=0.5).dt == 0.5


@pytest.mark.parametrize("times", [[5.0], [], [5.0, 5.0, 5.0]])
def test_less_than_two_times_are_no_record(times):
    with pytest.raises(RecordFormatError, match="at least 2"):
        uniform(np.array(times), np.zeros(len(times)), path="x")


def test_a_record_that_is_nearly_all_gap_is_refused():
    with pytest.raises(RecordFormatError, match="nearly all gap"):
        uniform(np.array([0, 0.1, 0.2, 1e6]), np.zeros(4), path="x")


def test_shared_stamps_that_fit_no_step_are_refused():
    counts = np.tile([1, 9, 1, 9, 1, 2, 30], 5)  # rows per second
    times = np.repeat(np.arange(counts.size), counts).astype(float)
    with pytest.raises(RecordFormatError, match="print the stamps with more digits"):
        uniform(times, np.arange(times.size, dtype=float), path="x")


def test_gap_history_counts_runs():
    nan = np.nan
    (line,) = gap_history(np.array([nan, 1, nan, nan, 2]), 0.5)
    assert line.startswith("2 gap(s), 3 of 5 samples missing (60 %), the longest 1 s")
    assert gap_history(np.zeros(3), 0.5) == []
