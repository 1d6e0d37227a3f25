"""A fully nonlinear engine: long-crested waves by the high-order spectral method.

The surface elevation eta and the potential psi at the surface of a periodic line obey

    eta_t = (1 + eta_x^2) W - psi_x eta_x,
    psi_t = -g eta - psi_x^2 / 2 + (1 + eta_x^2) W^2 / 2,

W the vertical velocity at the surface, expanded to third order in steepness (West et al. 1987,
J. Geophys. Res. 92, 11803, eqs 9-14, all terms kept to the same order).  The linear part is
exact (integrating factor), the nonlinear part is marched by the classical Runge-Kutta scheme,
products are de-aliased to third order, and nonlinear terms are ramped in from a linear start
(Dommermuth 2000, Wave Motion 32, eq. 20).

Where a crest would break the surface stays single-valued only if energy leaves it: an eddy
viscosity acts where the slope exceeds `BREAKING_SLOPE`, and a mild filter
exp(-(k / k_max)^30) per peak period acts at the end of the resolved range (form of Xiao et al.
2013, J. Fluid Mech. 720, eq. 2.8).  Both stand for breaking and do not resolve it.

Limits of validity: one horizontal direction, third-order nonlinearity (steepness kp Hs/2 up to
about 0.12; above, losses to the breaking model grow and should be reported).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft

from forecaster.errors import InputError, NumericsError
from forecaster.waves.linear import GRAVITY

BREAKING_SLOPE = 0.58
EDDY_VISCOSITY = 0.04  # in units of omega_p / kp^2
FILTER_POWER = 30


@dataclass(frozen=True, slots=True, eq=False)
class Surface:
    """Elevation [m] and surface potential [m^2/s] on a periodic line, each (points,)."""

    elevation: np.ndarray
    potential: np.ndarray


class FullyNonlinearSea:
    """The high-order spectral equations on a periodic line.

    Parameters
    ----------
    length : float [m]
        Period of the line.
    peak_wavenumber : float [rad/m]
        Scale of the breaking model.
    modes : int
        Wavenumbers kept: 2 pi j / length, j = 1 .. modes.  The grid has 4 `modes` points, which
        is what products of three factors need.
    depth : float [m]
        Uniform; ``inf`` for deep water.
    breaking : bool
        Whether the breaking model acts.
    order : int
        1 (linear), 2 or 3.

    Examples
    --------
    >>> sea = FullyNonlinearSea(100.0, peak_wavenumber=2 * np.pi / 100, modes=8)
    >>> sea.points
    32
    """

    def __init__(self, length, *, peak_wavenumber, modes, depth=np.inf, breaking=True, order=3):
        if not (length > 0 and peak_wavenumber > 0 and modes >= 1 and depth > 0):
            raise InputError(
                "length, peak_wavenumber, modes and depth must be positive, got "
                f"{length!r}, {peak_wavenumber!r}, {modes!r}, {depth!r}"
            )
        if order not in (1, 2, 3):
            raise InputError(f"order must be 1, 2 or 3, got {order!r}")
        self.length = float(length)
        self.modes = int(modes)
        self.points = 4 * self.modes
        self.depth = float(depth)
        self.order = order
        self.breaking = breaking
        peak_omega = np.sqrt(GRAVITY * peak_wavenumber)
        self._viscosity = EDDY_VISCOSITY * peak_omega / peak_wavenumber**2
        k = 2 * np.pi / self.length * np.arange(self.modes + 1)
        self._k = k
        tanh = np.tanh(k * self.depth) if np.isfinite(depth) else np.ones_like(k)
        self._vertical = k * tanh
        self.omega = np.sqrt(GRAVITY * self._vertical)
        self._filter_rate = peak_omega / (2 * np.pi) * (k / k[-1]) ** FILTER_POWER
        # a breaking front is covered over about a tenth of the peak wavelength
        grid_k = 2 * np.pi / self.length * np.arange(self.points // 2 + 1)
        self._front = np.exp(-0.5 * (grid_k / (1.5 * peak_wavenumber)) ** 2)
        # multipliers that turn (eta, psi) spectra into the six fields of the first level
        self._first = np.stack(
            [np.ones_like(k), 1j * k, 1j * k, self._vertical, k**2, k**2 * self._vertical]
        )
        self._second = np.stack([self._vertical, k**2])
        self._padded = np.zeros((6, self.points // 2 + 1), complex)

    @property
    def x(self) -> np.ndarray:
        """(points,) places of the grid [m]."""
        return self.length / self.points * np.arange(self.points)

    def _to_grid(self, spectra):
        padded = self._padded[: len(spectra)]
        padded[:, : self.modes + 1] = spectra
        return fft.irfft(padded, self.points, axis=-1)

    def _to_modes(self, fields):
        return fft.rfft(fields, axis=-1)[..., : self.modes + 1]

    def _nonlinear(self, state, breaking_mask):
        """Spectra of the nonlinear part of (eta_t, psi_t)."""
        eta_modes, psi_modes = state
        spectra = self._first * psi_modes
        spectra[:2] = self._first[:2] * eta_modes
        eta, slope, psi_x, w1, psi_zz, psi_zzz = self._to_grid(spectra)
        second = self._to_modes(-eta * w1)
        w2_part, second_zz = self._to_grid(self._second * second)
        w2 = w2_part + eta * psi_zz
        rates = np.empty((3, self.points))
        if self.order == 3:
            half_square = 0.5 * eta * eta
            rates[0] = -eta * w2_part - half_square * psi_zz  # third-order potential
            rates[1] = w2 + eta * second_zz + half_square * psi_zzz + slope * (slope * w1 - psi_x)
            rates[2] = 0.5 * (w1 * w1 - psi_x * psi_x) + w1 * w2
        else:
            rates[0] = 0.0
            rates[1] = w2 - slope * psi_x
            rates[2] = 0.5 * (w1 * w1 - psi_x * psi_x)
        modes = self._to_modes(rates)
        result = np.empty_like(state)
        np.multiply(self._vertical, modes[0], out=result[0])
        result[0] += modes[1]
        result[1] = modes[2]
        if breaking_mask is not None:
            flux = self._to_modes(breaking_mask * np.stack([slope, psi_x]))
            result += 1j * self._k * flux
        result[:, 0] = 0
        return result

    def _breaking_mask(self, state):
        """Eddy viscosity on the grid [m^2/s], or None where nothing is too steep."""
        slope = self._to_grid((1j * self._k * state[0])[None])[0]
        excess = np.abs(slope) - BREAKING_SLOPE
        if not (excess > 0).any():
            return None
        mask = np.clip(excess / (0.25 * BREAKING_SLOPE), 0, 1)
        front = fft.irfft(fft.rfft(mask) * self._front, self.points)
        return self._viscosity * np.clip(4 * front, 0, 1)

    def energy(self, surface: Surface) -> float:
        """Energy per unit length over density [m^3/s^2], to the order of the expansion.

        E = (1/2L) integral (psi eta_t + g eta^2) dx (Zakharov 1968).
        """
        state = self._to_modes(np.stack([surface.elevation, surface.potential]))
        rate = self._vertical * state[1]
        if self.order > 1:
            rate = rate + self._nonlinear(state, None)[0]
        eta_t = self._to_grid(rate[None])[0]
        density = surface.potential * eta_t + GRAVITY * surface.elevation**2
        return float(0.5 * density.mean())

    def march(self, surface, *, step, samples, steps_per_sample=1, ramp=0.0, settle=0, places=None):
        """Advance a sea and record the elevation.

        Parameters
        ----------
        surface : Surface
            Start.
        step : float [s]
            Time step.
        samples : int
            How many samples to record, after `settle` unrecorded steps.
        steps_per_sample : int
        ramp : float [s]
            Time over which nonlinear terms grow: factor 1 - exp(-(t/ramp)^4); 0 for none.
        settle : int
            Steps before the first sample.
        places : (m,) int array or None
            Grid points to record; None for all.

        Returns
        -------
        elevation : (samples, m) array [m]
        surface : Surface
            The end state.

        Raises
        ------
        NumericsError
            If the surface stops being finite; carries the samples recorded so far.
        """
        places = np.arange(self.points) if places is None else np.asarray(places)
        state = self._to_modes(np.stack([surface.elevation, surface.potential]).astype(float))
        state[:, 0] = 0
        half = _Rotation(self, 0.5 * step)
        keep = np.exp(-self._filter_rate * step) if self.order > 1 else 1.0
        out = np.empty((samples, places.size))
        steps = settle + samples * steps_per_sample
        recorded = 0

        def check(values, index):
            if not np.isfinite(values).all():
                raise NumericsError(
                    f"the sea stopped being finite within {index} steps of {step:g} s; "
                    "a shorter step or a gentler sea is needed",
                    achieved=out[:recorded],
                )

        with np.errstate(over="ignore", invalid="ignore"):  # a blow-up is judged by the surface
            for index in range(steps):
                if index >= settle and (index - settle) % steps_per_sample == 0:
                    row = self._to_grid(state[:1])[0][places]
                    check(row, index)
                    out[recorded] = row
                    recorded += 1
                state = keep * self._advance(state, step, index * step, half, ramp)
            elevation, potential = self._to_grid(state)
        check(elevation, steps)
        return out, Surface(elevation.copy(), potential.copy())

    def _advance(self, state, step, time, half, ramp):
        if self.order == 1:
            return half(half(state))
        mask = self._breaking_mask(state) if self.breaking else None
        grow = [
            1 - np.exp(-((t / ramp) ** 4)) if ramp else 1.0
            for t in (time, time + 0.5 * step, time + step)
        ]
        turned = half(state)
        k1 = half(self._nonlinear(state, mask)) * grow[0]
        k2 = self._nonlinear(turned + (0.5 * step) * k1, mask) * grow[1]
        k3 = self._nonlinear(turned + (0.5 * step) * k2, mask) * grow[1]
        k4 = self._nonlinear(half(turned + step * k3), mask) * grow[2]
        return half(turned + (step / 6) * (k1 + 2 * (k2 + k3))) + (step / 6) * k4


class _Rotation:
    """Exact linear evolution of (eta, psi) spectra over a time."""

    def __init__(self, sea, time):
        omega = sea.omega
        self.cos = np.cos(omega * time)
        sin = np.sin(omega * time)
        safe = np.where(omega > 0, omega, 1.0)
        self.eta_from_psi = sea._vertical / safe * sin
        self.psi_from_eta = -GRAVITY / safe * sin

    def __call__(self, state):
        eta, psi = state
        result = np.empty_like(state)
        result[0] = self.cos * eta + self.eta_from_psi * psi
        result[1] = self.psi_from_eta * eta + self.cos * psi
        return result
