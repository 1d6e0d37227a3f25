"""Scattering spectrum of a whole record in metres and seconds, and how far it may be believed.

`scattering` works in scaled units and windows; here the eigenvalues of one record get a place in
it, a height and a group speed, its energy is shared out, and its periodic repetition is summed up.

In the integrable picture (cubic equation, waves alone on the water) eigenvalues never change.
Measured against a fully nonlinear computation (``python benchmarks/scattering_invariance.py``,
docs/scattering.md) they do, by steepness and above all where a piece is cut out of a sea;
`expected_drift` says by how much.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import isfinite

import numpy as np

from forecaster.datatypes import Envelope, Record, SeaState, WaveGroup
from forecaster.waves.envelope import record_envelope
from forecaster.waves.linear import group_velocity
from forecaster.waves.scattering import (
    continuous_energy,
    discrete_spectrum,
    eigenvalue_locations,
    envelope_scale,
    evolution_scale,
    group_content,
    periodic_spectrum,
    scaled_envelope,
)

OPEN_BAND = 0.01  # of Hs, as the height of a soliton: narrower bands are taken for closed
DRIFT_DISTANCE = 20  # wavelengths
# root mean square change of the largest soliton's height over that distance, share of Hs: of an
# isolated train of a random sea in the fully nonlinear engine, and of a group cut out of a train
# that obeys the cubic equation exactly, by steepness kp Hs/2
_DRIFT_STEEPNESS = (0.06, 0.09, 0.12)
_TRAIN_DRIFT = (0.011, 0.023, 0.042)
_GROUP_DRIFT = (0.10, 0.22, 0.22)
# the most that waves which enter and leave a record (32 to 256 periods) at its ends did to it
END_DRIFT = 0.12


@dataclass(frozen=True, slots=True)
class LocatedEigenvalue:
    """One discrete eigenvalue and the envelope soliton that it stands for.

    Parameters
    ----------
    value : complex
        Of q = conj(k0 A)/sqrt(2) over omega0 t.
    time : float [s]
        Where in the record it lives: centroid of its eigenfunction, to 1/128 of the record.
    height : float [m]
        Envelope height 2|A| of the soliton, from Im.
    height_ratio : float
        The same over Hs.
    speed : float [m/s]
        Group speed of the soliton, from Re.
    speed_offset : float
        Its group speed over the carrier's, less 1.
    """

    value: complex
    time: float
    height: float
    height_ratio: float
    speed: float
    speed_offset: float


@dataclass(frozen=True, slots=True)
class PeriodicModes:
    """The record repeated for ever: what its main spectrum holds above the real axis.

    Parameters
    ----------
    points : int
        Of the main spectrum.
    unstable_modes : int
        Pairs of points joined above the axis: groups that grow and fade again.
    open_bands : int
        Those of them whose points lie more than `OPEN_BAND` units apart.
    single_points : int
        Points joined to their mirror image across the axis (stable wave trains), or to a point too
        low to be looked for.
    widest_band : float
        Largest distance between the points of a pair, in the unit asked for.
    """

    points: int
    unstable_modes: int
    open_bands: int
    single_points: int
    widest_band: float


@dataclass(frozen=True, slots=True, eq=False)
class ScatteringSpectrum:
    """What the scattering transform says of one record.

    Parameters
    ----------
    envelope : Envelope
        Of the free waves: the record and what continues it at either end.
    carrier_speed : float [m/s]
        Group speed of the carrier.
    eigenvalues : tuple of LocatedEigenvalue
        Of the whole record, highest first.
    groups : tuple of WaveGroup
        In order of time.
    discrete_share, continuous_share : float
        Of the wave energy: in the eigenvalues above, and in waves that disperse.  What is left is
        in eigenvalues too small to be looked for.
    periodic : PeriodicModes
        In `soliton_unit`: widths as the height of a soliton over Hs.
    drift, group_drift : float
        `expected_drift` of the whole and of a group.
    remarks : tuple of str
        How far all of this holds.
    """

    envelope: Envelope
    carrier_speed: float
    eigenvalues: tuple[LocatedEigenvalue, ...]
    groups: tuple[WaveGroup, ...]
    discrete_share: float
    continuous_share: float
    periodic: PeriodicModes
    drift: float
    group_drift: float
    remarks: tuple[str, ...]


def expected_drift(steepness: float) -> tuple[float, float]:
    """How much the largest soliton's height changes over 20 wavelengths, as a share of Hs.

    Parameters
    ----------
    steepness : float
        kp Hs/2; outside the measured 0.06 .. 0.12 the nearest measured value is given.

    Returns
    -------
    train, group : float
        Root mean square change of an isolated train of a random sea of 24 periods in the fully
        nonlinear engine, and of the largest group cut out of such a train.  Nothing would change
        if the integrable picture held.  Deep water, long-crested JONSWAP seas (gamma 3.3); origin:
        ``python benchmarks/scattering_invariance.py``.

    Examples
    --------
    >>> train, group = expected_drift(0.09)
    >>> 0 < train < group < 1
    True
    """
    at = float(steepness)
    return (
        float(np.interp(at, _DRIFT_STEEPNESS, _TRAIN_DRIFT)),
        float(np.interp(at, _DRIFT_STEEPNESS, _GROUP_DRIFT)),
    )


def paired_ends(points) -> tuple[np.ndarray, np.ndarray]:
    """Which points of a periodic main spectrum are joined by a band.

    Parameters
    ----------
    points : (m,) complex array
        In the upper half plane, double points twice (`scattering.periodic_spectrum`).

    Returns
    -------
    pairs : (p, 2) complex array
        Points joined above the real axis.
    alone : (m - 2 p,) complex array
        Points joined to their mirror image, across the axis.

    Notes
    -----
    The nearest are joined first, and every point may also be joined to its own mirror image, which
    lies 2 Im l from it.  Right wherever bands are short against what lies between them, as in
    records much longer than their groups; a band is not traced.  The ends of a band have traces +2
    and -2, and this is not told here: so have 87 of the 88 pairs of the two demo records.

    Examples
    --------
    A plane wave of height 1 with one unstable mode:

    >>> pairs, alone = paired_ends([1j, 0.8j, 0.8j])
    >>> pairs.tolist(), alone.tolist()
    ([[0.8j, 0.8j]], [1j])
    """
    points = np.asarray(points, complex)
    first, second = np.triu_indices(points.size)
    other = np.where(first == second, points.conj()[second], points[second])
    free = np.ones(points.size, bool)
    pairs, alone = [], []
    for i in np.argsort(np.abs(points[first] - other), kind="stable"):
        a, b = first[i], second[i]
        if not (free[a] and free[b]):
            continue
        free[[a, b]] = False
        if a == b:
            alone.append(points[a])
        else:
            pairs.append((points[a], points[b]))
    return np.array(pairs, complex).reshape(-1, 2), np.array(alone, complex)


def soliton_unit(envelope: Envelope, sea: SeaState) -> float:
    """Im of the eigenvalue whose soliton has the envelope height 2|A| = Hs: |q| per metre Hs/4."""
    return envelope_scale(envelope) * sea.hs / 4


def periodic_modes(q, dt, *, unit: float, order: int = 6) -> PeriodicModes:
    """Summary of the main spectrum of a record repeated for ever.

    Parameters
    ----------
    q, dt, order
        As for `scattering.periodic_spectrum`.
    unit : float
        Distance in the plane of eigenvalues that counts as 1, such as `soliton_unit`; may be 0
        where q is.

    Raises
    ------
    InputError, NumericsError
        As `scattering.periodic_spectrum`.

    Examples
    --------
    A plane wave with one unstable mode:

    >>> modes = periodic_modes(np.ones(64), 5 / 64, unit=1.0)
    >>> modes.points, modes.unstable_modes, modes.open_bands, modes.single_points
    (3, 1, 0, 1)
    """
    points = periodic_spectrum(q, dt, order=order)
    pairs, alone = paired_ends(points)
    widths = np.abs(pairs[:, 0] - pairs[:, 1]) / unit
    return PeriodicModes(
        points=points.size,
        unstable_modes=len(pairs),
        open_bands=int((widths > OPEN_BAND).sum()),
        single_points=alone.size,
        widest_band=float(widths.max(initial=0.0)),
    )


def scattering_spectrum(record: Record, sea: SeaState) -> ScatteringSpectrum:
    """Eigenvalues, groups, energy shares and periodic modes of a record.

    Parameters
    ----------
    record : Record
        Without gaps, drift removed.
    sea : SeaState
        Of the record.

    Raises
    ------
    InputError
        For gaps, or a sampling of fewer than 4 samples per peak period.
    NumericsError
        If the eigenvalues found are not those that the argument principle counts.

    Notes
    -----
    The record is continued by its conditional mean at either end (`envelope.free_envelope`) and
    is zero beyond, or, for the periodic modes, begins again.  A soliton of eigenvalue xi + i eta
    has |q| = 2 eta and dT/dX = -4 xi (Zakharov & Shabat 1972): with f = |q|/|A| and the distance L
    per X (`scattering.evolution_scale`)

        2|A| = 4 eta/f,     1/speed = 1/cg - 4 xi/(omega0 L).

    The share of the energy in discrete eigenvalues grows with the length of the record: on the
    real axis |a|^2 of a long random record is evenly spread over 0 .. 1, so that the continuous
    part stays at that of a few periods.  Compare records of equal length only.

    Examples
    --------
    >>> from forecaster.waves.spectrum import sea_state
    >>> t = np.arange(0, 1200, 0.5)
    >>> wave = 2 * np.cos(0.6 * t) / np.cosh((t - 700) / 60)
    >>> found = scattering_spectrum(Record(wave, dt=0.5), sea_state(wave, 0.5))
    >>> len(found.eigenvalues) > 0, bool(abs(found.eigenvalues[0].time - 700) < 15)
    (True, True)
    """
    envelope = record_envelope(record, sea, margin=0.0)
    q, dt = scaled_envelope(envelope)
    unit = soliton_unit(envelope, sea)
    values = discrete_spectrum(q, dt)
    energy = float((np.abs(q) ** 2).sum() * dt)
    times = envelope.start + eigenvalue_locations(q, dt, values) / envelope.omega0
    speed = float(group_velocity(envelope.omega0, envelope.depth))
    slowness = 1 / speed - 4 * values.real / (envelope.omega0 * evolution_scale(envelope))

    ratios = values.imag / unit  # none in too shallow a water, where the unit is 0
    located = tuple(
        LocatedEigenvalue(
            value=complex(value),
            time=float(time),
            height=float(ratio * sea.hs),
            height_ratio=float(ratio),
            speed=float(1 / slow),
            speed_offset=float(1 / slow / speed - 1),
        )
        for value, ratio, time, slow in zip(values, ratios, times, slowness, strict=True)
    )
    drift, group_drift = expected_drift(sea.steepness)
    return ScatteringSpectrum(
        envelope=envelope,
        carrier_speed=speed,
        eigenvalues=located,
        groups=group_content(envelope),
        discrete_share=4 * float(values.imag.sum()) / energy if energy else 0.0,
        continuous_share=continuous_energy(q, dt) / energy if energy else 0.0,
        periodic=periodic_modes(q, dt, unit=unit),
        drift=drift,
        group_drift=group_drift,
        remarks=_remarks(sea, drift, group_drift, focuses=unit > 0),
    )


def _remarks(sea, drift, group_drift, *, focuses) -> tuple[str, ...]:
    """How far the picture holds for this sea."""
    remarks = [
        "Eigenvalues are constant only for narrow-banded waves that are alone. In fully nonlinear "
        "computations of seas of this steepness, the largest soliton of a train standing alone "
        f"changed by {100 * drift:.0f} % of Hs over {DRIFT_DISTANCE} wavelengths (root mean "
        "square). Waves that enter or leave at the ends of a record add up to "
        f"{100 * END_DRIFT:.0f} % of Hs.",
        "The eigenvalues of a group cut out of a sea change as others overtake it: by "
        f"{100 * group_drift:.0f} % of Hs over the same distance.",
        "The share of energy in eigenvalues grows with the length of the record: compare records "
        "of equal length only.",
    ]
    low, high = _DRIFT_STEEPNESS[0], _DRIFT_STEEPNESS[-1]
    if not low <= sea.steepness <= high:
        remarks.append(
            f"These changes were measured for steepness {low:g} to {high:g}; it is "
            f"{sea.steepness:.2g} here."
        )
    if not focuses:
        remarks.append("The water is too shallow for envelope solitons (k0 h below 1.363).")
    elif isfinite(sea.depth):
        remarks.append("These changes were measured in deep water.")
    if sea.spread is not None and sea.spread > 10:
        remarks.append("The picture is for long-crested waves; this sea is not.")
    return tuple(remarks)
