"""Zakharov-Shabat scattering transform of wave envelopes: eigenvalues and group content.

(Signatures first; bodies follow.)  Everything works in the scaled units of `scaled_envelope`:
q = conj(k0 A)/sqrt(2) over T = omega0 t, one carrier period is 2 pi, distance X = x/scale with
scale = `evolution_scale(envelope)` metres.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from forecaster.datatypes import Envelope, WaveGroup


@dataclass(frozen=True, slots=True, eq=False)
class WindowedContent:
    """Scattering content of m windows of one record; every field an (m,) array, scaled units.

    `largest` Im of the eigenvalue with the largest imaginary part (0: none), `largest_re` its Re
    (0: none), `count`, `sum_im`, `sum_im2`, `energy_share` 4 sum Im / int |q|^2 dT, `chirp`
    d2 phase/dT2 (energy weighted), `focus_distance` (NaN: does not focus downwave) in scaled X,
    `amplification` (>= 1).
    """

    largest: np.ndarray
    largest_re: np.ndarray
    count: np.ndarray
    sum_im: np.ndarray
    sum_im2: np.ndarray
    energy_share: np.ndarray
    chirp: np.ndarray
    focus_distance: np.ndarray
    amplification: np.ndarray


def scaled_envelope(envelope: Envelope) -> tuple[np.ndarray, float]:
    """(q, dt) of an envelope: dimensionless q and step omega0 dt."""
    raise NotImplementedError


def evolution_scale(envelope: Envelope) -> float:
    """Metres of distance per unit of scaled X (1/k0 in deep water)."""
    raise NotImplementedError


def discrete_spectrum(q, dt, *, floor=0.02) -> np.ndarray:
    """Eigenvalues of (n,) q, largest imaginary part first, certified by the argument principle."""
    raise NotImplementedError


def windowed_content(q, dt, centres, half_width=12 * np.pi, *, floor=0.02) -> WindowedContent:
    """Content of windows centres +- half_width (scaled time from the first sample), tapered."""
    raise NotImplementedError


def segment_groups(envelope: Envelope) -> tuple[tuple[int, int], ...]:
    """Windows (first, last + 1 sample) of the wave groups of an envelope."""
    raise NotImplementedError


def group_content(envelope: Envelope) -> tuple[WaveGroup, ...]:
    """The wave groups of an envelope and their scattering content."""
    raise NotImplementedError
