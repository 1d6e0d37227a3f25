"""The frozen data types that flow through the package: fields, shapes, units, validity.

No algorithms live here.  SI units inside; the last axis is time; arrays are read-only.
``times`` are seconds: POSIX seconds (UTC) when ``calendar`` is true, else seconds on the
record's own clock.

>>> import numpy as np
>>> record = Record(elevation=np.zeros(4), dt=0.5, start=10.0)
>>> record.n, record.end, record.duration
(4, 11.5, 2.0)
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from math import inf, isfinite

import numpy as np

from forecaster.errors import InputError

SENSORS = ("fixed", "buoy", "radar", "unknown")
FLAGS = ("pass", "not evaluated", "suspect", "fail", "missing")
VERDICTS = ("pass", "suspect", "fail")
DOMAIN_STATUS = ("inside", "edge", "outside")


def _frozen(values, dtype=float) -> np.ndarray:
    """Read-only copy-free view of `values` as an array of `dtype`."""
    array = np.asarray(values, dtype=dtype).view()
    array.flags.writeable = False
    return array


@dataclass(frozen=True, slots=True, eq=False)
class Record:
    """Surface elevation at one point about its own mean, on a uniform step.

    Parameters
    ----------
    elevation : (n,) array [m]
        Upward positive.  NaN where nothing was measured (a gap): gaps are never filled unseen.
    dt : float [s]
        Step between samples.
    start : float [s]
        Time of the first sample.
    calendar : bool
        Whether `start` is POSIX seconds (UTC); otherwise the record's own clock.
    source : str
        File name or a word for the origin.
    depth : float [m]
        Water depth; ``inf`` is deep water.
    sensor : str
        One of `SENSORS`.
    history, warnings : tuple of str
        What was done to the data, in order; what was assumed.
    """

    elevation: np.ndarray
    dt: float
    start: float = 0.0
    calendar: bool = False
    source: str = "array"
    depth: float = inf
    sensor: str = "unknown"
    history: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()

    def __post_init__(self):
        object.__setattr__(self, "elevation", _frozen(self.elevation))
        if self.elevation.ndim != 1 or self.elevation.size < 2:
            raise InputError(
                f"a record needs one row of at least 2 samples, got shape {self.elevation.shape}"
            )
        if np.isinf(self.elevation).any():
            raise InputError("elevation holds infinite values; use NaN where nothing was measured")
        if not (isfinite(self.dt) and self.dt > 0):
            raise InputError(f"dt must be a positive number of seconds, got {self.dt!r}")
        if not isfinite(self.start):
            raise InputError(f"start must be a finite time in seconds, got {self.start!r}")
        if not self.depth > 0:
            raise InputError(f"depth must be positive metres (inf for deep), got {self.depth!r}")
        if self.sensor not in SENSORS:
            raise InputError(f"sensor must be one of {', '.join(SENSORS)}, got {self.sensor!r}")

    @property
    def n(self) -> int:
        """Number of samples, gaps included."""
        return self.elevation.size

    @property
    def end(self) -> float:
        """Time of the last sample [s]: the issue time."""
        return self.start + (self.n - 1) * self.dt

    @property
    def duration(self) -> float:
        """n dt [s]."""
        return self.n * self.dt

    @property
    def times(self) -> np.ndarray:
        """(n,) times of the samples [s]."""
        return self.start + self.dt * np.arange(self.n)

    def step(self, history: str, **changes) -> Record:
        """A new record with `changes` and one more line of history."""
        return replace(self, history=(*self.history, history), **changes)


@dataclass(frozen=True, slots=True)
class QualityTest:
    """One published quality test: what was examined, what failed.

    Parameters
    ----------
    name : str
        Test name, for example ``"spike"``.
    flag : str
        One of `FLAGS`.
    examined : int
        How many samples (or segments) were looked at; 0 never reads as good.
    failed : int
        How many of them failed.
    detail : str
        One sentence with the values and, unless passed, the remedy.
    """

    name: str
    flag: str
    examined: int
    failed: int
    detail: str

    def __post_init__(self):
        if self.flag not in FLAGS:
            raise InputError(f"flag must be one of {', '.join(FLAGS)}, got {self.flag!r}")


@dataclass(frozen=True, slots=True)
class QualityReport:
    """All quality tests of a record and the verdict: pass, suspect or fail."""

    verdict: str
    tests: tuple[QualityTest, ...]

    def __post_init__(self):
        if self.verdict not in VERDICTS:
            raise InputError(f"verdict must be one of {', '.join(VERDICTS)}, got {self.verdict!r}")


@dataclass(frozen=True, slots=True, eq=False)
class Spectrum:
    """One-sided variance spectral density of the surface elevation.

    Parameters
    ----------
    frequency : (m,) array [Hz]
        Increasing, uniform when estimated from a record.
    density : (m,) array [m^2/Hz]
    degrees_of_freedom : float
        Of each estimate; ``inf`` for a model spectrum.
    """

    frequency: np.ndarray
    density: np.ndarray
    degrees_of_freedom: float = inf

    def __post_init__(self):
        object.__setattr__(self, "frequency", _frozen(self.frequency))
        object.__setattr__(self, "density", _frozen(self.density))
        if self.frequency.shape != self.density.shape or self.frequency.ndim != 1:
            raise InputError(
                "frequency and density must be rows of one length, got "
                f"{self.frequency.shape} and {self.density.shape}"
            )


@dataclass(frozen=True, slots=True)
class SeaState:
    """Parameters of the sea in a record (sensor noise included).

    Parameters
    ----------
    hs : float [m]
        Significant wave height 4 sqrt(m0).
    tp, tm01, tm02 : float [s]
        Robust peak period; mean periods m0/m1 and sqrt(m0/m2).
    kp : float [rad/m]
        Wavenumber at the peak, finite depth.
    steepness : float
        kp hs / 2.
    bandwidth : float
        Longuet-Higgins nu, frequencies 0.3 .. 3 fp.
    qp : float
        Goda peakedness, frequencies 0.3 .. 3 fp.
    bfi : float
        (steepness / sqrt 2) / delta, delta = 1/(qp sqrt(pi)).
    bfi_depth : float
        The same with the finite-depth nonlinear coefficient.
    kph : float
        kp times depth (inf: deep).
    depth : float [m]
    spread : float or None [deg]
        Circular standard deviation of direction; None: unknown.
    hs_error : float
        Relative standard sampling error of `hs` from the record's length and spectrum.
    """

    hs: float
    tp: float
    tm01: float
    tm02: float
    kp: float
    steepness: float
    bandwidth: float
    qp: float
    bfi: float
    bfi_depth: float
    kph: float
    depth: float
    spread: float | None
    hs_error: float


@dataclass(frozen=True, slots=True, eq=False)
class Envelope:
    """Complex envelope A of the free waves, eta = Re{A exp(i(k0 x - omega0 t))}.

    Parameters
    ----------
    values : (..., n) complex array [m]
    dt : float [s]
    start : float [s]
        Time of the first value.
    omega0 : float [rad/s]
        Carrier.
    k0 : float [rad/m]
        Wavenumber of the carrier.
    depth : float [m]
    """

    values: np.ndarray
    dt: float
    start: float
    omega0: float
    k0: float
    depth: float = inf

    def __post_init__(self):
        object.__setattr__(self, "values", _frozen(self.values, complex))

    @property
    def times(self) -> np.ndarray:
        """(n,) times of the values [s]."""
        return self.start + self.dt * np.arange(self.values.shape[-1])


@dataclass(frozen=True, slots=True, eq=False)
class Waves:
    """Zero-down-crossing waves of one record, in order of time.

    Parameters
    ----------
    start, end : (m,) arrays [s]
        The two down-crossings that bound each wave.
    crest_time : (m,) array [s]
        Time of the crest: a wave belongs to the interval that holds its crest.
    height, crest, trough : (m,) arrays [m]
        Crest-to-trough height, crest above the mean level, trough below it (positive).
    """

    start: np.ndarray
    end: np.ndarray
    crest_time: np.ndarray
    height: np.ndarray
    crest: np.ndarray
    trough: np.ndarray

    def __post_init__(self):
        for name in ("start", "end", "crest_time", "height", "crest", "trough"):
            object.__setattr__(self, name, _frozen(getattr(self, name)))


@dataclass(frozen=True, slots=True)
class WaveStatistics:
    """The zero-down-crossing waves of a record, told by their number, largest and runs.

    Parameters
    ----------
    count : int
        Complete waves.
    highest : float [m]
        Largest height; 0 without a wave, as the ratios and the crest.
    highest_ratio : float
        The same over hs.
    highest_time : float [s]
        Of its crest; NaN without a wave.
    highest_crest : float [m]
    crest_ratio : float
        The same over hs.
    expected_ratio : float
        Mean over many records of the largest of `count` heights, over hs.
    run_length : float
        Mean number of successive waves of hs or more; 0 without one.
    total_run : float
        Mean number of waves from the begin of one such run to that of the next; ``inf`` with
        fewer than two runs.
    """

    count: int
    highest: float
    highest_ratio: float
    highest_time: float
    highest_crest: float
    crest_ratio: float
    expected_ratio: float
    run_length: float
    total_run: float


@dataclass(frozen=True, slots=True, eq=False)
class WaveGroup:
    """One wave group in a record and what its scattering spectrum says.

    Parameters
    ----------
    start, end, peak_time : float [s]
        Window of the group (minima of the envelope) and time of its envelope maximum, at the
        sensor.
    height : float [m]
        Envelope height 2|A| at the peak.
    eigenvalues : (m,) complex array
        Discrete Zakharov-Shabat eigenvalues of the window, largest imaginary part first, in the
        scaling q = conj(k0 A)/sqrt(2) over omega0 t.
    soliton_share : float
        Share of the window's energy in these.
    chirp : float [rad/s^2]
        Rate at which the frequency of the waves rises through the group; a group that begins
        with its short, slow waves focuses downwave: negative.
    focus_distance : float [m]
        Distance downwave at which the group is expected to focus; NaN if it does not.
    focus_time : float [s]
        When its envelope maximum is expected there; NaN if it does not focus.
    amplification : float
        Expected envelope maximum there over the envelope maximum at the sensor (>= 1).
    """

    start: float
    end: float
    peak_time: float
    height: float
    eigenvalues: np.ndarray
    soliton_share: float
    chirp: float
    focus_distance: float
    focus_time: float
    amplification: float

    def __post_init__(self):
        object.__setattr__(self, "eigenvalues", _frozen(self.eigenvalues, complex))


@dataclass(frozen=True, slots=True)
class Target:
    """Where, until when and for what the question is asked.

    Parameters
    ----------
    distance : float [m]
        Along the mean direction of travel, from sensor to target.
    travel_time : float [s]
        distance / group speed at the peak.
    valid_from, valid_to : float [s]
        The horizon, on the record's clock, at the target.
    criterion : str
        ``"height"`` or ``"crest"``.
    threshold : float
        As a ratio to hs.
    threshold_m : float [m]
    """

    distance: float
    travel_time: float
    valid_from: float
    valid_to: float
    criterion: str
    threshold: float
    threshold_m: float


@dataclass(frozen=True, slots=True)
class IntervalForecast:
    """One interval at the target.  Probabilities are None where none can be given.

    `start`, `end` [s] on the record's clock; `lead` [s] from the issue time to `start`;
    `probability` that its largest wave reaches the threshold; `base_rate` the same from the sea
    state alone; `coverage` 0..1; `median_height` [m] of its largest wave.
    """

    start: float
    end: float
    lead: float
    probability: float | None
    base_rate: float | None
    coverage: float
    median_height: float | None


@dataclass(frozen=True, slots=True)
class Exceedance:
    """Horizon probability that the largest wave (or crest) reaches `ratio` times hs."""

    ratio: float
    height: float
    probability: float | None
    base_rate: float | None


@dataclass(frozen=True, slots=True)
class GroupForecast:
    """A group of the record as shown to the user; times [s] on the record's clock."""

    time: float
    arrival: float
    duration: float
    height: float
    eigenvalues: tuple[complex, ...]
    focus_distance: float | None
    amplification: float | None


@dataclass(frozen=True, slots=True)
class Reason:
    """What moved this forecast: a feature in words and its effect on the log odds."""

    feature: str
    effect: float


@dataclass(frozen=True, slots=True)
class Domain:
    """Whether the sea lies where the model was trained and verified: inside, edge, outside."""

    status: str
    reasons: tuple[str, ...] = ()

    def __post_init__(self):
        if self.status not in DOMAIN_STATUS:
            raise InputError(
                f"status must be one of {', '.join(DOMAIN_STATUS)}, got {self.status!r}"
            )


@dataclass(frozen=True, slots=True)
class ModelIdentity:
    """Name, version and SHA-256 of the model file that answered."""

    name: str
    version: str
    sha256: str


@dataclass(frozen=True, slots=True, eq=False)
class Forecast:
    """The whole answer.  `probability` and its like are None where no forecast can be given.

    `issued_at` is the wall clock in POSIX seconds; all other times are on the record's clock.
    `probability_90` is the 90 % interval of the probability itself; `base_rate` the probability
    from the sea state alone, averaged over the sampling error of hs, `base_rate_known_hs` the
    plain value; `odds_ratio` the odds of `probability` over those of `base_rate`.
    """

    issued_at: float
    record: Record
    quality: QualityReport
    sea_state: SeaState | None
    target: Target | None
    probability: float | None
    probability_90: tuple[float, float] | None
    base_rate: float | None
    base_rate_known_hs: float | None
    odds_ratio: float | None
    intervals: tuple[IntervalForecast, ...]
    exceedance: tuple[Exceedance, ...]
    groups: tuple[GroupForecast, ...]
    reasons: tuple[Reason, ...]
    domain: Domain
    caveats: tuple[str, ...]
    model: ModelIdentity | None
    program_version: str
    answered: bool = field(default=False)
