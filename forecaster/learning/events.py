"""What is to be forecast: intervals at the target, and what happened in them.

An interval is `INTERVAL_PERIODS` peak periods of the record long; interval j begins
j intervals after the issue time.  A wave (zero-down-crossing, about the mean level) belongs to
the interval that holds its crest.
"""

from __future__ import annotations

import numpy as np

from forecaster.waves.heights import interval_maxima

INTERVAL_PERIODS = 4.0
HEIGHT_RATIOS = (0.6, 2.8)  # k asked of the height model
CREST_RATIOS = (0.35, 1.75)  # k asked of the crest model
HORIZON_COVERAGE = 0.5  # from which an interval is forecast from its own waves
EXTREME_HEIGHT = 2.0
EXTREME_CREST = 1.25


def interval_edges(issue: float, tp: float, count: int) -> np.ndarray:
    """(count + 1,) edges [s] of the first `count` intervals after the issue time.

    >>> interval_edges(100.0, 10.0, 2)
    array([100., 140., 180.])
    """
    return issue + INTERVAL_PERIODS * tp * np.arange(count + 1)


def outcomes(elevation, dt, edges, *, start=0.0) -> tuple[np.ndarray, np.ndarray]:
    """Largest wave height and crest [m] in each interval, NaN where the elevation ends first.

    Parameters
    ----------
    elevation : (n,) array [m]
        Noise-free elevation at the target, bound waves included, at least 16 samples per peak
        period.
    dt : float [s]
    edges : (m + 1,) array [s]
    start : float [s]
        Time of the first sample.

    Examples
    --------
    >>> t = np.arange(0, 100, 0.5)
    >>> heights, crests = outcomes(np.cos(2 * np.pi * t / 10), 0.5, np.array([10.0, 50.0, 120.0]))
    >>> heights.round(6), crests.round(6)
    (array([ 2., nan]), array([ 1., nan]))
    """
    edges = np.asarray(edges, float)
    heights, crests = interval_maxima(elevation, dt, edges - start)
    # a wave whose crest is in the interval may end a period later
    whole = edges[1:] + (edges[1] - edges[0]) / INTERVAL_PERIODS <= start + dt * len(elevation)
    return np.where(whole, heights, np.nan), np.where(whole, crests, np.nan)
