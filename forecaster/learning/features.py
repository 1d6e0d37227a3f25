"""The feature table: what the model is told about each (record, distance, interval).

The same code trains and scores.  `look_ahead` does the work that one record needs (sea state,
envelope, forward run to all distances, scattering spectrum); a `Scene` is one distance and its
intervals; `FEATURES` names each number, its unit and its source.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from forecaster.datatypes import Envelope, Record, SeaState, Spectrum, Waves
from forecaster.learning.events import INTERVAL_PERIODS
from forecaster.waves.envelope import FREE_BAND, elevation_of, free_envelope
from forecaster.waves.heights import zero_crossing_waves
from forecaster.waves.linear import group_velocity, wavenumber
from forecaster.waves.propagate import ForwardRun, phase_coherence
from forecaster.waves.spectrum import estimate_spectrum, noise_floor, sea_state

MARGIN_PERIODS = (14.0, 0.8)  # empty time around a run: constant, and per wavelength of distance
COVERAGE_POINTS = 5  # places within an interval at which coverage is taken
TIMING_PERIODS = 1.0  # by how much a forecast wave may miss its interval


@dataclass(frozen=True, slots=True, eq=False)
class Track:
    """A run seen at one distance: its waves, and twice its envelope over time."""

    waves: Waves
    times: np.ndarray
    envelope_height: np.ndarray


@dataclass(frozen=True, slots=True, eq=False)
class LookAhead:
    """All that one record says, carried to several distances.

    Parameters
    ----------
    record : Record
        Cut at the issue time, free of gaps and drift.
    sea : SeaState
    spectrum : Spectrum
    envelope : Envelope
        Of the free waves at the sensor.
    distances : (d,) array [m]
        Increasing.
    expected, full, linear : tuple of d Track
        The forward run as expected wave, the same with nothing damped, and the linear run.
    sensor : Track
        The record itself.
    """

    record: Record
    sea: SeaState
    spectrum: Spectrum
    envelope: Envelope
    distances: np.ndarray
    expected: tuple[Track, ...]
    full: tuple[Track, ...]
    linear: tuple[Track, ...]
    sensor: Track


def _track(envelope: Envelope) -> Track:
    elevation, dt = elevation_of(envelope)
    waves = zero_crossing_waves(elevation, dt, start=envelope.start)
    return Track(waves, envelope.times, 2 * np.abs(envelope.values))


def run_envelope(record: Record, sea: SeaState, reach: float) -> Envelope:
    """Free-wave envelope of a record with enough empty time for a run over `reach` metres."""
    wavelengths = reach * sea.kp / (2 * np.pi)
    margin = (MARGIN_PERIODS[0] + MARGIN_PERIODS[1] * wavelengths) * sea.tp
    return free_envelope(
        record.elevation,
        record.dt,
        omega0=2 * np.pi / sea.tp,
        depth=record.depth,
        start=record.start,
        margin=margin,
    )


def look_ahead(record: Record, distances, *, spread: float | None = None) -> LookAhead:
    """Sea state, envelope and forward runs of one record.

    Parameters
    ----------
    record : Record
        Without gaps, cut at the issue time, drift removed.
    distances : (d,) array_like [m]
        Increasing, not negative.
    spread : float or None [deg]

    Raises
    ------
    InputError
        For gaps, too coarse a sampling, or distances that are negative or not increasing.
    NumericsError
        If a forward run fails.
    """
    distances = np.atleast_1d(np.asarray(distances, float))
    sea = sea_state(record.elevation, record.dt, depth=record.depth, spread=spread)
    spectrum = estimate_spectrum(record.elevation, record.dt)
    envelope = run_envelope(record, sea, float(distances[-1]))
    run = ForwardRun(envelope)
    full = run.march(distances)
    expected = tuple(run.expected(step, sea.steepness) for step in full)
    linear = ForwardRun(envelope, equation="linear").march(distances)
    return LookAhead(
        record=record,
        sea=sea,
        spectrum=spectrum,
        envelope=envelope,
        distances=distances,
        expected=tuple(map(_track, expected)),
        full=tuple(map(_track, full)),
        linear=tuple(map(_track, linear)),
        sensor=Track(
            zero_crossing_waves(record.elevation, record.dt, start=record.start),
            envelope.times,
            2 * np.abs(envelope.values),
        ),
    )


@dataclass(eq=False)
class Scene:
    """One record, one distance, its intervals: what a feature function looks at.

    Parameters
    ----------
    ahead : LookAhead
    index : int
        Which distance.
    edges : (m + 1,) array [s]
        Of the intervals at the target, on the record's clock.
    """

    ahead: LookAhead
    index: int
    edges: np.ndarray
    _memory: dict = field(default_factory=dict, repr=False)

    @property
    def count(self) -> int:
        """Number of intervals."""
        return self.edges.size - 1

    @property
    def distance(self) -> float:
        """Distance [m]."""
        return float(self.ahead.distances[self.index])

    @property
    def travel_time(self) -> float:
        """Time [s] that energy at the peak takes from sensor to target."""
        sea = self.ahead.sea
        return self.distance / float(group_velocity(2 * np.pi / sea.tp, sea.depth))

    def ranked_wave(self, track, quantity, *, widen=0.0, shift=0, rank=1):
        """(m,) `rank`-th largest height or crest [Hs] with its crest in each interval.

        The interval is widened by `widen` peak periods at both ends and moved by `shift`
        intervals; 0 where there is no such wave.
        """
        waves, sea = track.waves, self.ahead.sea
        values = getattr(waves, quantity)
        if values.size == 0:
            return np.zeros(self.count)
        move = shift * INTERVAL_PERIODS * sea.tp
        low = self.edges[:-1] + move - widen * sea.tp
        high = self.edges[1:] + move + widen * sea.tp
        inside = (waves.crest_time >= low[:, None]) & (waves.crest_time < high[:, None])
        found = np.where(inside, values, 0.0)
        if rank == 1:
            return found.max(axis=1) / sea.hs
        if values.size < rank:
            return np.zeros(self.count)
        return np.partition(found, -rank, axis=1)[:, -rank] / sea.hs

    def largest_envelope(self, track, *, shift=0, fed=False):
        """(m,) largest envelope height [Hs] in each interval, or in the window that feeds it."""
        sea = self.ahead.sea
        move = shift * INTERVAL_PERIODS * sea.tp - (self.travel_time if fed else 0.0)
        first = np.searchsorted(track.times, self.edges[:-1] + move)
        last = np.searchsorted(track.times, self.edges[1:] + move)
        return np.array(
            [
                track.envelope_height[a:b].max() if b > a else 0.0
                for a, b in zip(first, last, strict=True)
            ]
        ) / sea.hs  # fmt: skip

    def _energy_shares(self):
        """(m,) mean coverage, least coverage, and share known in phase, per interval."""
        if "shares" not in self._memory:
            ahead, sea = self.ahead, self.ahead.sea
            f = ahead.spectrum.frequency * sea.tp
            used = (f > FREE_BAND[0]) & (f < FREE_BAND[1])
            density = ahead.spectrum.density[used]
            share = density / density.sum()
            travel = self.distance / group_velocity(
                2 * np.pi * ahead.spectrum.frequency[used], sea.depth
            )
            inner = (np.arange(COVERAGE_POINTS) + 0.5) / COVERAGE_POINTS
            times = self.edges[:-1, None] + np.diff(self.edges)[:, None] * inner
            left = times[..., None] - travel
            inside = (left >= ahead.record.start) & (left <= ahead.record.end)
            coherent = phase_coherence(f[used] - 1, sea.kp * self.distance, sea.steepness) ** 2
            covered = inside @ share
            self._memory["shares"] = (
                covered.mean(axis=1),
                covered.min(axis=1),
                (inside @ (share * coherent)).mean(axis=1),
            )
        return self._memory["shares"]

    def coverage(self):
        """(m,) share of the energy that left the sensor inside the record, 0..1."""
        return self._energy_shares()[0]

    def least_coverage(self):
        """(m,) the least coverage within each interval."""
        return self._energy_shares()[1]

    def unexplained(self):
        """(m,) share of the energy that is not covered or whose phase is lost."""
        return 1 - self._energy_shares()[2]

    def statistics(self) -> dict[str, float]:
        """Skewness, excess kurtosis, groupiness and noise share of the record."""
        if "statistics" not in self._memory:
            ahead, sea = self.ahead, self.ahead.sea
            z = ahead.record.elevation - ahead.record.elevation.mean()
            sigma = z.std()
            times, heights = ahead.sensor.times, ahead.sensor.envelope_height
            inside = (times >= ahead.record.start) & (times <= ahead.record.end)
            square = heights[inside] ** 2
            white = noise_floor(ahead.spectrum, 1 / sea.tp) * ahead.spectrum.frequency[-1]
            self._memory["statistics"] = {
                "skewness": (z**3).mean() / sigma**3,
                "excess_kurtosis": (z**4).mean() / sigma**4 - 3,
                "groupiness": (square**2).mean() / square.mean() ** 2,
                "noise_share": np.sqrt(max(white, 0.0)) / sigma,
            }
        return self._memory["statistics"]


@dataclass(frozen=True, slots=True)
class Feature:
    """One column of the table: how it is computed, in what unit, from what source, in words."""

    function: Callable[[Scene], np.ndarray | float]
    unit: str
    source: str
    words: str


def _sea(name):
    return lambda scene: getattr(scene.ahead.sea, name)


def _statistic(name):
    return lambda scene: scene.statistics()[name]


def _run(track, quantity, **options):
    def value(scene):
        return scene.ranked_wave(getattr(scene.ahead, track)[scene.index], quantity, **options)

    return value


def _run_envelope(track, **options):
    def value(scene):
        return scene.largest_envelope(getattr(scene.ahead, track)[scene.index], **options)

    return value


def _lead(scene):
    return (scene.edges[:-1] - scene.ahead.record.end) / scene.ahead.sea.tp


_PAIR = "forward run with pair dispersion (waves.propagate)"
_LINEAR = "linear forward run (waves.propagate)"
_WIDE = {"widen": TIMING_PERIODS}

FEATURES: dict[str, Feature] = {
    # the sea
    "steepness": Feature(_sea("steepness"), "1", "kp Hs / 2", "steepness of the sea"),
    "bfi": Feature(_sea("bfi"), "1", "Janssen & Bidlot 2009", "Benjamin-Feir index"),
    "bandwidth": Feature(_sea("bandwidth"), "1", "Longuet-Higgins 1975", "spectral width"),
    "peakedness": Feature(_sea("qp"), "1", "Goda 1970", "spectral peakedness"),
    "hs_error": Feature(
        _sea("hs_error"), "1", "sampling variance of m0", "sampling error of Hs"
    ),
    # the record
    "skewness": Feature(_statistic("skewness"), "1", "third moment", "skewness of the record"),
    "excess_kurtosis": Feature(
        _statistic("excess_kurtosis"), "1", "fourth moment", "kurtosis of the record"
    ),
    "groupiness": Feature(
        _statistic("groupiness"), "1", "<|A|^4>/<|A|^2>^2", "groupiness of the record"
    ),
    "noise_share": Feature(
        _statistic("noise_share"), "1", "white floor of the spectrum", "sensor noise"
    ),
    "record_periods": Feature(
        lambda scene: min(scene.ahead.record.duration / scene.ahead.sea.tp, 128.0),
        "Tp", "record length", "length of the record",
    ),
    "samples_per_period": Feature(
        lambda scene: min(scene.ahead.sea.tp / scene.ahead.record.dt, 16.0),
        "1/Tp", "record step", "sampling of the record",
    ),
    "largest_height": Feature(
        lambda scene: scene.ahead.sensor.waves.height.max(initial=0.0) / scene.ahead.sea.hs,
        "Hs", "zero-down-crossing", "largest wave of the record",
    ),
    # where and when
    "distance_wavelengths": Feature(
        lambda scene: scene.distance * scene.ahead.sea.kp / (2 * np.pi),
        "peak wavelengths", "distance", "distance",
    ),
    "lead_periods": Feature(
        lambda scene: np.minimum(_lead(scene), 88.0), "Tp", "interval - issue time", "lead time"
    ),
    "coverage": Feature(
        Scene.coverage, "1", "Naaijen, Trulsen & Blondel-Couprie 2014",
        "share of the waves already measured",
    ),
    "least_coverage": Feature(
        Scene.least_coverage, "1", "the same, least within the interval",
        "share of the waves already measured",
    ),
    "unexplained": Feature(
        Scene.unexplained, "1", "coverage and phase_coherence", "part of the sea not followed"
    ),
    # the forward run
    "run_height": Feature(_run("expected", "height"), "Hs", _PAIR, "wave height of the run"),
    "run_crest": Feature(_run("expected", "crest"), "Hs", _PAIR, "crest of the run"),
    "run_envelope": Feature(_run_envelope("expected"), "Hs", _PAIR, "wave group of the run"),
    "run_height_wide": Feature(
        _run("expected", "height", **_WIDE), "Hs", _PAIR, "wave height of the run"
    ),
    "run_crest_wide": Feature(
        _run("expected", "crest", **_WIDE), "Hs", _PAIR, "crest of the run"
    ),
    "run_second_height": Feature(
        _run("expected", "height", **_WIDE, rank=2), "Hs", _PAIR, "second wave of the run"
    ),
    "run_height_before": Feature(
        _run("expected", "height", shift=-1), "Hs", _PAIR, "wave group just before"
    ),
    "run_height_after": Feature(
        _run("expected", "height", shift=1), "Hs", _PAIR, "wave group just after"
    ),
    "full_height": Feature(
        _run("full", "height"), "Hs", _PAIR + ", undamped", "wave height of the run"
    ),
    "full_crest": Feature(
        _run("full", "crest", **_WIDE), "Hs", _PAIR + ", undamped", "crest of the run"
    ),
    "full_envelope": Feature(
        _run_envelope("full"), "Hs", _PAIR + ", undamped", "wave group of the run"
    ),
    "linear_height": Feature(
        _run("linear", "height", **_WIDE), "Hs", _LINEAR, "wave height of the linear run"
    ),
    "linear_envelope": Feature(
        _run_envelope("linear"), "Hs", _LINEAR, "wave group of the linear run"
    ),
    "fed_envelope": Feature(
        lambda scene: scene.largest_envelope(scene.ahead.sensor, fed=True),
        "Hs", "envelope of the record", "group that left the sensor",
    ),
}  # fmt: skip


def feature_table(scene: Scene, names: tuple[str, ...] = tuple(FEATURES)) -> np.ndarray:
    """Features of each interval of a scene.

    Parameters
    ----------
    scene : Scene
    names : tuple of str
        Columns wanted, keys of `FEATURES`.

    Returns
    -------
    (intervals, len(names)) float32 array
    """
    table = np.empty((scene.count, len(names)), np.float32)
    for column, name in enumerate(names):
        table[:, column] = FEATURES[name].function(scene)
    return table
