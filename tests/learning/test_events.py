import numpy as np
import pytest

from forecaster.learning.events import (
    CREST_RATIOS,
    EXTREME_CREST,
    EXTREME_HEIGHT,
    HEIGHT_RATIOS,
    INTERVAL_PERIODS,
    interval_edges,
    outcomes,
)

DT = 0.05


def waves(*amplitudes, period=10.0):
    """Elevation of one sine wave a period: first down, then up, each with its own amplitude."""
    t = np.arange(0, period * len(amplitudes), DT)
    return -np.array(amplitudes)[(t // period).astype(int)] * np.sin(2 * np.pi * t / period)


def test_intervals_are_four_peak_periods_from_the_issue_time():
    # by hand: 4 Tp = 50 s
    assert interval_edges(7.0, 12.5, 3).tolist() == [7.0, 57.0, 107.0, 157.0]
    assert INTERVAL_PERIODS == 4.0


def test_the_extreme_thresholds_lie_inside_what_the_models_are_asked():
    # published: H > 2 Hs and crest > 1.25 Hs (Haver 2000; Dysthe, Krogstad & Muller 2008)
    assert (EXTREME_HEIGHT, EXTREME_CREST) == (2.0, 1.25)
    assert HEIGHT_RATIOS[0] < EXTREME_HEIGHT < HEIGHT_RATIOS[1]
    assert CREST_RATIOS[0] < EXTREME_CREST < CREST_RATIOS[1]


def test_largest_wave_and_crest_of_each_interval():
    # by hand: waves of heights 2, 6, 4, 8, 2, 2 m, crests at 7.5 s, 17.5 s, ...
    heights, crests = outcomes(waves(1, 3, 2, 4, 1, 1), DT, np.array([2.0, 22.0, 42.0]))
    np.testing.assert_allclose(heights, [6, 8], rtol=1e-4)
    np.testing.assert_allclose(crests, [3, 4], rtol=1e-4)


def test_a_wave_belongs_to_the_interval_that_holds_its_crest():
    # by hand: the wave of 8 m lasts from 30 to 40 s, its trough at 32.5 s, its crest at 37.5 s
    elevation = waves(1, 1, 1, 4, 1, 1, 1)
    before, after = outcomes(elevation, DT, np.array([17.0, 37.0, 57.0]))[0]
    assert (before, after) == (pytest.approx(2, rel=1e-4), pytest.approx(8, rel=1e-4))
    before, after = outcomes(elevation, DT, np.array([18.0, 38.0, 58.0]))[0]
    assert (before, after) == (pytest.approx(8, rel=1e-4), pytest.approx(2, rel=1e-4))


def test_the_clock_may_start_anywhere():
    elevation = waves(1, 3, 2, 4, 1, 1)
    edges = np.array([2.0, 22.0, 42.0])
    here, there = outcomes(elevation, DT, edges), outcomes(elevation, DT, edges + 500, start=500.0)
    np.testing.assert_allclose(here, there, rtol=1e-12)


def test_an_interval_whose_last_wave_may_be_cut_off_is_unknown():
    # by hand: 60 s are stored; an interval of 20 s stands for Tp = 5 s, so up to 55 s is whole
    edges = np.array([14.9, 34.9, 54.9, 74.9])
    heights, crests = outcomes(waves(1, 1, 1, 1, 1, 1), DT, edges)
    assert np.isfinite(heights[:2]).all() and np.isnan(heights[2])
    assert np.isfinite(crests[:2]).all() and np.isnan(crests[2])
    assert np.isnan(outcomes(waves(1, 1, 1, 1, 1, 1), DT, edges + 0.2)[0][1])


def test_an_interval_without_a_wave_has_height_zero():
    # by hand: between 20 and 40 s the surface stays above the level
    elevation = waves(1, 1, 1, 1, 1, 1)
    elevation[round(20 / DT) : round(40 / DT)] = 1.0
    assert outcomes(elevation, DT, np.array([22.0, 30.0]))[0][0] == 0
