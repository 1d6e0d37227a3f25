"""The feature table: what the model is told about each (record, distance, interval).

The same code trains and scores.  `look_ahead` does the work that one record needs (sea state,
envelope, forward run to all distances, scattering spectrum); a `Scene` is one distance and its
intervals; `FEATURES` names each number, its unit and its source.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import cache, partial
from itertools import pairwise

import numpy as np

from forecaster.datatypes import Envelope, Record, SeaState, Spectrum, Waves
from forecaster.learning.events import INTERVAL_PERIODS
from forecaster.waves.envelope import FREE_BAND, covered, elevation_of, record_envelope
from forecaster.waves.heights import zero_crossing_waves
from forecaster.waves.linear import group_velocity
from forecaster.waves.propagate import ForwardRun, phase_coherence
from forecaster.waves.scattering import (
    WindowedContent,
    WindowedEnergy,
    discrete_spectrum,
    eigenvalue_locations,
    evolution_scale,
    scaled_envelope,
    windowed_content,
    windowed_energy,
)
from forecaster.waves.scattering_spectrum import PeriodicModes, periodic_modes, soliton_unit
from forecaster.waves.spectrum import estimate_spectrum, noise_floor, sea_state

MARGIN_PERIODS = (14.0, 0.8)  # empty time around a run: constant, and per wavelength of distance
PLACES = 12  # times within an interval at which coverage is taken
WAVES_PER_INTERVAL = INTERVAL_PERIODS / 0.75  # Tm02 is about 0.75 Tp in wind seas
CONTINUED_PERIODS = 0.7  # by how much the conditional mean extends what is known
LEAST_UNKNOWN = 0.01  # share of the energy that no run knows
REACH_LEVELS = np.arange(0.0, 3.4, 0.1)
WINDOW_STEP_PERIODS = 2.5  # between the centres of scattering windows
TIMING_PERIODS = 1.0  # by how much a forecast wave may miss its interval
# Windows whose energy is followed downwave: short ones know when it left, long ones how fast it is
FLUX_WINDOWS = {"short": (8.0, 1.0), "long": (14.0, 2.0)}  # length, from one to the next [Tp]
FLUX_BIN_PERIODS = 0.5  # of the times of arrival
FLUX_SMOOTHING_PERIODS = 0.75  # standard deviation
FLUX_NEIGHBOUR_PERIODS = 3.0  # from the middle of an interval to what comes before and after


@cache
def _rice_table():
    from scipy.special import chndtr

    step = 0.1
    a, b = step * np.arange(141), step * np.arange(161)
    return step, 1 - chndtr(b[None, :] ** 2, 2.0, a[:, None] ** 2)


def rice_exceedance(a, b):
    """P(R > b) of a Rician R of unit scale about `a` (Marcum's Q), by table to about 1e-3.

    >>> bool(abs(rice_exceedance(0.0, 2.0) - np.exp(-2)) < 1e-3)
    True
    """
    step, table = _rice_table()
    # far out only the difference counts
    excess = np.maximum(a - step * (table.shape[0] - 2), 0.0)
    x = np.clip((a - excess) / step, 0, table.shape[0] - 1.001)
    y = np.clip((b - excess) / step, 0, table.shape[1] - 1.001)
    i, j = x.astype(int), y.astype(int)
    u, v = x - i, y - j
    low = (1 - v) * table[i, j] + v * table[i, j + 1]
    high = (1 - v) * table[i + 1, j] + v * table[i + 1, j + 1]
    return (1 - u) * low + u * high


@dataclass(frozen=True, slots=True, eq=False)
class Track:
    """A run seen at one distance: its waves, and twice its envelope over time."""

    waves: Waves
    times: np.ndarray
    envelope_height: np.ndarray


@dataclass(frozen=True, slots=True, eq=False)
class Content:
    """Scattering spectrum of a record: of windows along it, and of the whole.

    Parameters
    ----------
    envelope : Envelope
        Of the free waves: the record and what continues it at either end.
    centres : (w,) array [s]
        Of the windows, on the record's clock.
    windows : WindowedContent
    flux : dict of str to WindowedEnergy
        For each length in `FLUX_WINDOWS`.
    eigenvalues : (m,) complex array
        Of the whole record.
    locations : (m,) array [s]
        Where they live, on the record's clock.
    periodic : PeriodicModes
        Of the record repeated for ever; widths in Hs.
    scale : float
        Root mean square of q over the record: eigenvalues are told in units of it.
    action : float
        Integral of |q|^2 over the record's scaled time.
    """

    envelope: Envelope
    centres: np.ndarray
    windows: WindowedContent
    flux: dict[str, WindowedEnergy]
    eigenvalues: np.ndarray
    locations: np.ndarray
    periodic: PeriodicModes
    scale: float
    action: float


@dataclass(frozen=True, slots=True, eq=False)
class FirstLook:
    """What one record says before any run: enough for coverage and for the model's domain.

    Parameters
    ----------
    record : Record
        Cut at the issue time, free of gaps and drift.
    sea : SeaState
    spectrum : Spectrum
    distances : (d,) array [m]
        Increasing.
    """

    record: Record
    sea: SeaState
    spectrum: Spectrum
    distances: np.ndarray


@dataclass(frozen=True, slots=True, eq=False)
class LookAhead(FirstLook):
    """All that one record says, carried to several distances.

    Parameters
    ----------
    record, sea, spectrum, distances
        As in `FirstLook`.
    envelope : Envelope
        Of the free waves at the sensor.
    expected, full, linear : tuple of d Track
        The forward run as expected wave, the same with nothing damped, and the linear run.
    sensor : Track
        The record itself.
    content : Content
        Scattering spectrum at the sensor.
    """

    envelope: Envelope
    expected: tuple[Track, ...]
    full: tuple[Track, ...]
    linear: tuple[Track, ...]
    sensor: Track
    content: Content


def _track(envelope: Envelope) -> Track:
    elevation, dt = elevation_of(envelope)
    waves = zero_crossing_waves(elevation, dt, start=envelope.start)
    return Track(waves, envelope.times, 2 * np.abs(envelope.values))


def run_envelope(record: Record, sea: SeaState, reach: float) -> Envelope:
    """Free-wave envelope of a record with enough empty time for a run over `reach` metres."""
    wavelengths = reach * sea.kp / (2 * np.pi)
    margin = (MARGIN_PERIODS[0] + MARGIN_PERIODS[1] * wavelengths) * sea.tp
    return record_envelope(record, sea, margin=margin)


def scattering_content(record: Record, sea: SeaState) -> Content:
    """Scattering spectrum of a record's envelope, by windows and as a whole.

    Raises
    ------
    NumericsError
        If the eigenvalues found are not those that the argument principle counts.
    """
    envelope = record_envelope(record, sea, margin=0.0)
    q, step = scaled_envelope(envelope)
    period = 2 * np.pi / envelope.omega0

    def places(spacing):
        centres = np.arange(record.start, record.end + period, spacing * period)
        return centres, (centres - envelope.start) * envelope.omega0

    centres, at = places(WINDOW_STEP_PERIODS)
    inside = (envelope.times >= record.start) & (envelope.times <= record.end)
    square = np.abs(q[inside]) ** 2
    whole = discrete_spectrum(q, step, order=4)
    located = eigenvalue_locations(q, step, whole, order=4)
    return Content(
        envelope=envelope,
        centres=centres,
        windows=windowed_content(q, step, at),
        flux={
            name: windowed_energy(q, step, places(spacing)[1], half_width=np.pi * length)
            for name, (length, spacing) in FLUX_WINDOWS.items()
        },
        eigenvalues=whole,
        locations=envelope.start + located / envelope.omega0,
        periodic=periodic_modes(q, step, unit=soliton_unit(envelope, sea), order=4),
        scale=float(np.sqrt(square.mean())),
        action=square.sum() * step,
    )


def first_look(record: Record, distances, *, spread: float | None = None) -> FirstLook:
    """Sea state and spectrum of one record; parameters and errors as of `look_ahead`."""
    return FirstLook(
        record,
        sea_state(record.elevation, record.dt, depth=record.depth, spread=spread),
        estimate_spectrum(record.elevation, record.dt),
        np.atleast_1d(np.asarray(distances, float)),
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
    return run_ahead(first_look(record, distances, spread=spread))


def run_ahead(first: FirstLook) -> LookAhead:
    """A first look carried on: envelope, forward runs and scattering spectrum.

    Parameters
    ----------
    first : FirstLook

    Raises
    ------
    InputError, NumericsError
        As `look_ahead`.
    """
    record = first.record
    envelope = run_envelope(record, first.sea, float(first.distances[-1]))
    run = ForwardRun(envelope)
    full = run.march(first.distances)
    expected = tuple(run.expected(step, first.sea.steepness) for step in full)
    linear = ForwardRun(envelope, equation="linear").march(first.distances)
    return LookAhead(
        record=record,
        sea=first.sea,
        spectrum=first.spectrum,
        distances=first.distances,
        envelope=envelope,
        expected=tuple(map(_track, expected)),
        full=tuple(map(_track, full)),
        linear=tuple(map(_track, linear)),
        sensor=Track(
            zero_crossing_waves(record.elevation, record.dt, start=record.start),
            envelope.times,
            2 * np.abs(envelope.values),
        ),
        content=scattering_content(record, first.sea),
    )


def carried(ahead: LookAhead, equation: str) -> LookAhead:
    """The same look ahead with a run of another equation, undamped, as its expected wave.

    Parameters
    ----------
    ahead : LookAhead
    equation : str
        One of `propagate.EQUATIONS`.

    Raises
    ------
    NumericsError
        If the run fails.
    """
    run = ForwardRun(ahead.envelope, equation=equation)
    return replace(ahead, expected=tuple(map(_track, run.march(ahead.distances))))


@dataclass(eq=False)
class Scene:
    """One record, one distance, its intervals: what a feature function looks at.

    Parameters
    ----------
    ahead : FirstLook
        A `LookAhead` for everything but coverage, sea state, noise and length of the record.
    index : int
        Which distance.
    edges : (m + 1,) array [s]
        Of the intervals at the target, on the record's clock.
    """

    ahead: FirstLook
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

    def _inside(self, times, *, widen=0.0, shift=0):
        """(m, n) whether each of n times [s] falls in each interval.

        The interval is widened by `widen` peak periods at both ends and moved by `shift` intervals.
        """
        tp = self.ahead.sea.tp
        move, slack = shift * INTERVAL_PERIODS * tp, widen * tp
        low, high = self.edges[:-1, None] + move - slack, self.edges[1:, None] + move + slack
        return (times >= low) & (times < high)

    def _arrival(self, sent, speed):
        """Time [s] at the target of what left the sensor at `sent` [s], scaled speed dT/dX."""
        envelope = self.ahead.content.envelope
        late = speed * (self.distance / evolution_scale(envelope)) / envelope.omega0
        return sent + self.travel_time + late

    def ranked_wave(self, track, quantity, *, widen=0.0, shift=0, rank=1):
        """(m,) `rank`-th largest height or crest [Hs] with its crest in each interval.

        The interval is widened by `widen` peak periods at both ends and moved by `shift`
        intervals; 0 where there is no such wave.
        """
        waves, sea = track.waves, self.ahead.sea
        values = getattr(waves, quantity)
        if values.size == 0:
            return np.zeros(self.count)
        found = np.where(self._inside(waves.crest_time, widen=widen, shift=shift), values, 0.0)
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

    def feeding_group(self) -> np.ndarray:
        """(m,) index of the strongest scattering window that feeds each interval, -1 for none.

        Windows whose centre, moved by the travel time, falls in the interval widened by
        `TIMING_PERIODS`; the strongest has the largest Im of an eigenvalue.
        """
        if "group" not in self._memory:
            content = self.ahead.content
            inside = self._inside(content.centres + self.travel_time, widen=TIMING_PERIODS)
            strength = np.where(inside, content.windows.largest, -1.0)
            best = strength.argmax(axis=1)
            self._memory["group"] = np.where(inside.any(axis=1), best, -1)
        return self._memory["group"]

    def group_value(self, name: str) -> np.ndarray:
        """(m,) one field of the feeding group's content, 0 where no group feeds."""
        group = self.feeding_group()
        return np.where(group >= 0, getattr(self.ahead.content.windows, name)[group], 0.0)

    def focus_nearness(self) -> np.ndarray:
        """(m,) distance over the feeding group's focusing distance, 0 if it does not focus."""
        focus = self.group_value("focus_distance")
        here = self.distance / evolution_scale(self.ahead.content.envelope)
        ratio = here / np.where(focus > 0, focus, np.inf)
        return np.clip(ratio, 0, 4)

    def arriving_waves(self, window: str) -> tuple[np.ndarray, np.ndarray]:
        """Height of the waves that arrive if phases are left out.

        Each window's energy moves at the speeds of its scattering spectrum, dispersive waves and
        solitons alike (`scattering.windowed_energy`).

        Parameters
        ----------
        window : str
            Which of `FLUX_WINDOWS`.

        Returns
        -------
        times : (t,) array [s]
            At the target, on the record's clock, `FLUX_BIN_PERIODS` apart.
        height : (t,) array [Hs]
            Root mean square of the envelope height 2|A|; 1/sqrt(2) in the mean of the record.
        """
        key = "arriving " + window
        if key not in self._memory:
            content, tp = self.ahead.content, self.ahead.sea.tp
            envelope, sent = content.envelope, content.flux[window]
            left = envelope.start + sent.centre / envelope.omega0
            arrival = self._arrival(left[:, None], sent.speed)
            width = FLUX_BIN_PERIODS * tp
            reach = int(4 * FLUX_SMOOTHING_PERIODS / FLUX_BIN_PERIODS)
            room = FLUX_NEIGHBOUR_PERIODS * tp + (reach + 1) * width
            first = self.edges[0] - room
            count = int((self.edges[-1] + room - first) / width)
            index = ((arrival - first) // width).astype(int)
            inside = (index >= 0) & (index < count)
            rate = np.bincount(index[inside], weights=sent.energy[inside], minlength=count)
            offset = np.arange(-reach, reach + 1) * FLUX_BIN_PERIODS / FLUX_SMOOTHING_PERIODS
            kernel = np.exp(-0.5 * offset**2)
            # overlapping windows, whose squared weight is 3/8 in the mean, count energy repeatedly
            length, spacing = FLUX_WINDOWS[window]
            overlap = 0.375 * length / spacing
            mean = content.scale**2 * envelope.omega0 * width * overlap
            flux = np.convolve(rate, kernel / kernel.sum(), "same") / mean
            times = first + width * (np.arange(count) + 0.5)
            self._memory[key] = times, np.sqrt(0.5 * flux)
        return self._memory[key]

    def arriving_height(self, window: str, *, later: float = 0.0) -> np.ndarray:
        """(m,) `arriving_waves` in the middle of each interval, or `later` peak periods after."""
        times, height = self.arriving_waves(window)
        middle = 0.5 * (self.edges[:-1] + self.edges[1:])
        return np.interp(middle + later * self.ahead.sea.tp, times, height)

    def largest_arriving(self, window: str) -> np.ndarray:
        """(m,) largest of `arriving_waves` in each interval."""
        times, height = self.arriving_waves(window)
        return np.array(
            [height[a:b].max() for a, b in pairwise(np.searchsorted(times, self.edges))]
        )

    def arriving_soliton(self) -> np.ndarray:
        """(m,) largest soliton [rms q] of the whole record that arrives by its own speed, or 0.

        In the interval widened by `TIMING_PERIODS`.
        """
        content = self.ahead.content
        arrival = self._arrival(content.locations, -4 * content.eigenvalues.real)
        inside = self._inside(arrival, widen=TIMING_PERIODS)
        found = np.where(inside, content.eigenvalues.imag, 0.0)
        return found.max(axis=1, initial=0.0) / content.scale

    def _shares(self):
        """Places in time and, at each, shares of the energy: covered, known in phase.

        Returns times (m, p) and two (m, p) arrays, 0..1.  A component is covered where it left
        the sensor inside the record, and known in phase times its squared `phase_coherence`.
        """
        if "shares" not in self._memory:
            ahead, sea = self.ahead, self.ahead.sea
            f = ahead.spectrum.frequency * sea.tp
            used = (f > FREE_BAND[0]) & (f < FREE_BAND[1])
            density = ahead.spectrum.density[used]
            share = density / density.sum()
            inner = (np.arange(PLACES) + 0.5) / PLACES
            times = self.edges[:-1, None] + np.diff(self.edges)[:, None] * inner
            start, end = ahead.record.start, ahead.record.end
            left_between = partial(
                covered, times, self.distance, frequency=ahead.spectrum.frequency[used],
                start=start, depth=sea.depth,
            )  # fmt: skip
            inside = left_between(end=end)
            coherent = phase_coherence(f[used] - 1, sea.kp * self.distance, sea.steepness) ** 2
            continued = left_between(end=end + CONTINUED_PERIODS * sea.tp)
            known = continued @ (share * coherent)
            self._memory["shares"] = times, inside @ share, known
        return self._memory["shares"]

    def coverage(self):
        """(m,) share of the energy that left the sensor inside the record, 0..1."""
        return self._shares()[1].mean(axis=1)

    def least_coverage(self):
        """(m,) the least coverage within each interval."""
        return self._shares()[1].min(axis=1)

    def unexplained(self):
        """(m,) share of the energy that is not covered or whose phase is lost."""
        return 1 - self._shares()[2].mean(axis=1)

    def reach(self, probability: float):
        """(m,) height [Hs] that an interval's highest wave reaches with `probability`.

        As if what the expected wave does not know were Gaussian: the envelope is then Rician
        about the expected one (Rice 1945, Bell Syst. Tech. J. 24, sec. 3.10), with `PLACES`
        places an interval counting as `WAVES_PER_INTERVAL` independent waves.
        """
        if "reach" not in self._memory:
            track = self.ahead.expected[self.index]
            times, _, known = self._shares()
            centre = np.interp(times, track.times, track.envelope_height) / self.ahead.sea.hs
            spread = 0.5 * np.sqrt(np.clip(1 - known, LEAST_UNKNOWN, 1.0))
            level = REACH_LEVELS[:, None, None]
            below = 1 - rice_exceedance(centre / spread, level / spread)
            log_none = np.log(np.clip(below, 1e-12, 1)).sum(axis=-1)
            self._memory["reach"] = 1 - np.exp(log_none * (WAVES_PER_INTERVAL / PLACES))
        exceeded = self._memory["reach"]
        return np.array([np.interp(-probability, -row, REACH_LEVELS) for row in exceeded.T])

    def statistics(self) -> dict[str, float]:
        """Skewness, excess kurtosis and groupiness of the record."""
        if "statistics" not in self._memory:
            ahead = self.ahead
            z = ahead.record.elevation - ahead.record.elevation.mean()
            sigma = z.std()
            times, heights = ahead.sensor.times, ahead.sensor.envelope_height
            inside = (times >= ahead.record.start) & (times <= ahead.record.end)
            square = heights[inside] ** 2
            self._memory["statistics"] = {
                "skewness": (z**3).mean() / sigma**3,
                "excess_kurtosis": (z**4).mean() / sigma**4 - 3,
                "groupiness": (square**2).mean() / square.mean() ** 2,
            }
        return self._memory["statistics"]

    def noise_share(self) -> float:
        """Standard deviation of white sensor noise over that of the record."""
        elevation, spectrum = self.ahead.record.elevation, self.ahead.spectrum
        white = noise_floor(spectrum, 1 / self.ahead.sea.tp) * spectrum.frequency[-1]
        return np.sqrt(max(white, 0.0)) / (elevation - elevation.mean()).std()


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


def _group(name, power=0):
    def value(scene):
        return scene.group_value(name) / scene.ahead.content.scale**power

    return value


def _content(function):
    return lambda scene: function(scene.ahead.content)


_SCATTERING = "Zakharov-Shabat spectrum of the feeding window (waves.scattering)"
_WHOLE = "Zakharov-Shabat spectrum of the record (waves.scattering)"
_PAIR = "forward run with pair dispersion (waves.propagate)"
_RICE = "expected envelope and the Gaussian rest (Rice 1945)"
_LINEAR = "linear forward run (waves.propagate)"
_FLUX = "energy at the speeds of the scattering spectrum (waves.scattering)"
_PERIODIC = "main spectrum of the record repeated for ever (waves.scattering_spectrum)"
_WIDE = {"widen": TIMING_PERIODS}


def _arriving_features(window):
    """Columns of what arrives of the energy of one length of windows."""
    functions = {
        "": lambda scene: scene.arriving_height(window),
        "_largest": lambda scene: scene.largest_arriving(window),
        "_before": lambda scene: scene.arriving_height(window, later=-FLUX_NEIGHBOUR_PERIODS),
        "_after": lambda scene: scene.arriving_height(window, later=FLUX_NEIGHBOUR_PERIODS),
    }
    return {
        f"arriving_{window}{place}": Feature(function, "Hs", _FLUX, "wave energy on its way here")
        for place, function in functions.items()
    }


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
        Scene.noise_share, "1", "white floor of the spectrum", "sensor noise"
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
    "reach_50": Feature(
        lambda scene: scene.reach(0.5), "Hs", _RICE, "height within reach of the run"
    ),
    "reach_10": Feature(
        lambda scene: scene.reach(0.1), "Hs", _RICE, "height within reach of the run"
    ),
    "reach_1": Feature(
        lambda scene: scene.reach(0.01), "Hs", _RICE, "height within reach of the run"
    ),
    "fed_envelope": Feature(
        lambda scene: scene.largest_envelope(scene.ahead.sensor, fed=True),
        "Hs", "envelope of the record", "group that left the sensor",
    ),
    # the scattering spectrum
    "group_eigenvalue": Feature(
        _group("largest", 1), "rms q", _SCATTERING, "scattering spectrum of the group"
    ),
    "group_speed_offset": Feature(
        _group("largest_re", 1), "rms q", _SCATTERING, "scattering spectrum of the group"
    ),
    "group_eigenvalue_sum": Feature(
        _group("sum_im", 1), "rms q", _SCATTERING, "scattering spectrum of the group"
    ),
    "group_soliton_share": Feature(
        _group("energy_share"), "1", _SCATTERING, "scattering spectrum of the group"
    ),
    "group_chirp": Feature(
        _group("chirp", 2), "rms q^2", "phase curvature of the group", "focusing of the group"
    ),
    "group_focus_nearness": Feature(
        Scene.focus_nearness, "1", "focusing distance (waves.scattering)", "focusing of the group"
    ),
    "group_amplification": Feature(
        _group("amplification"), "1", "focusing estimate", "focusing of the group"
    ),
    "record_eigenvalue": Feature(
        _content(lambda c: c.eigenvalues.imag.max(initial=0.0) / c.scale),
        "rms q", _WHOLE, "scattering spectrum of the record",
    ),
    "record_soliton_share": Feature(
        _content(lambda c: 4 * c.eigenvalues.imag.sum() / c.action),
        "1", _WHOLE, "scattering spectrum of the record",
    ),
    "unstable_modes": Feature(
        lambda scene: scene.ahead.content.periodic.unstable_modes
        / (scene.ahead.record.duration / scene.ahead.sea.tp),
        "1/Tp", _PERIODIC, "scattering spectrum of the record",
    ),
    "open_bands": Feature(
        _content(lambda c: c.periodic.open_bands / max(c.periodic.unstable_modes, 1)),
        "1", _PERIODIC, "scattering spectrum of the record",
    ),
    "widest_band": Feature(
        _content(lambda c: c.periodic.widest_band),
        "Hs", _PERIODIC, "scattering spectrum of the record",
    ),
    "arriving_soliton": Feature(
        Scene.arriving_soliton, "rms q", _WHOLE, "wave energy on its way here"
    ),
    **_arriving_features("short"),
    **_arriving_features("long"),
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
