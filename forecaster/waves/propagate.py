"""The forward run: a recorded envelope marched downwave.

With T = omega0 (t - x/cg), X = k0 x, a = k0 A and eta = Re{A exp(i(k0 x - omega0 t))}, waves at
frequency omega0 (1 + O) have a ~ exp(-i O T) and deep-water evolution in space is

    a_X = i O^2 a                                                 linear, exact
          - i |a|^2 a                                             cubic
          + 6 |a|^2 a_T + 2 a (|a|^2)_T + 2 i a |D_T|(|a|^2)      Dysthe
          - i (I_s / <I>) R(D_T) a                                pair dispersion

(Zakharov 1968; Dysthe 1979, Proc. R. Soc. A 369, 105; in space Lo & Mei 1985, J. Fluid Mech. 150,
395, and Trulsen & Stansberg 2001).  The Dysthe terms are the linearisation about the carrier of
the exact shift that one wave causes to another (Longuet-Higgins & Phillips 1962, J. Fluid Mech.
12, 333, eqs 1.1-1.4); R is what the linearisation leaves out, summed over the recorded spectrum:

    R(O2) = sum |a1|^2 (E - E_lin),
    E = 2 (1+O1)^3 (1+O2)^3,      E_lin = 2 + 6 (O1 + O2)      for O2 > O1,
    E = 2 (1+O2)^5 (1+O1),        E_lin = 2 + 2 O1 + 10 O2     for O2 < O1.

I_s is |a|^2 smoothed over `PAIR_SMOOTHING` carrier periods.

In finite depth the linear part is exact and the nonlinear part is the deep-water one times
X / (2 n tanh kh) (X: `linear.nonlinear_coefficient`, n: `linear.group_ratio`), which is exact for
the cubic term only (Hasimoto & Ono 1972).

Limits of validity: long-crested waves that run one way, no breaking; steepness kp Hs/2 up to
about 0.12; finite depth kp h above 3.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import fft

from forecaster.datatypes import Envelope
from forecaster.errors import InputError, NumericsError
from forecaster.waves.linear import group_ratio, nonlinear_coefficient, wavenumber

PAIR_SMOOTHING = 4.0  # carrier periods, standard deviation of the Gaussian
KEPT = (0.25, 2.4)  # frequencies over the carrier that a run keeps
STEP = 1.0  # in X
STEP_RATE = 1.5  # a step turns no component by more than this through pair dispersion [rad]
PHASE_LOSS = 24.0


@dataclass(frozen=True, slots=True)
class Equation:
    """One evolution equation: which terms it has, and where it comes from."""

    cubic: bool
    dysthe: bool
    pair_dispersion: bool
    source: str


EQUATIONS = {
    "linear": Equation(False, False, False, "Airy 1845"),
    "nls": Equation(True, False, False, "Zakharov 1968"),
    "dysthe": Equation(True, True, False, "Dysthe 1979; Lo & Mei 1985"),
    "dysthe-pair": Equation(True, True, True, "Dysthe 1979; Longuet-Higgins & Phillips 1962"),
}


@dataclass(frozen=True, slots=True)
class Stepper:
    """One explicit Runge-Kutta scheme: its tableau, order and source."""

    nodes: tuple[float, ...]
    matrix: tuple[tuple[float, ...], ...]
    weights: tuple[float, ...]
    order: int
    source: str


STEPPERS = {
    "heun": Stepper((0, 1), ((), (1,)), (1 / 2, 1 / 2), 2, "Heun 1900"),
    "rk4": Stepper(
        (0, 1 / 2, 1 / 2, 1),
        ((), (1 / 2,), (0, 1 / 2), (0, 0, 1)),
        (1 / 6, 1 / 3, 1 / 3, 1 / 6),
        4,
        "Kutta 1901",
    ),
}


def pair_residual(offset, share) -> np.ndarray:
    """R(O2)/<I>: pair dispersion left out by its linearisation, per unit intensity.

    Parameters
    ----------
    offset : (m,) array
        O = omega/omega0 - 1 of each component, above -1.
    share : (m,) array
        |a1|^2 of each component over their sum.

    Returns
    -------
    (m,) array

    Examples
    --------
    A lone component at the carrier shifts others by the exact less the linearised amount:

    >>> import numpy as np
    >>> o = np.array([-0.1, 0.0, 0.2])
    >>> pair_residual(o, np.array([0.0, 1.0, 0.0])).round(6)
    array([0.18098, 0.     , 0.256  ])
    """
    one, two = 1 + offset[None, :], 1 + offset[:, None]
    o1, o2 = offset[None, :], offset[:, None]
    above = 2 * (one * two) ** 3 - (2 + 6 * (o1 + o2))
    below = 2 * two**5 * one - (2 + 2 * o1 + 10 * o2)
    return np.where(o2 > o1, above, np.where(o2 < o1, below, 0.5 * (above + below))) @ share


def phase_coherence(offset, distance, steepness) -> np.ndarray:
    """Expected share of a component that a forward run still has in phase.

    Parameters
    ----------
    offset : array_like
        O = omega/omega0 - 1.
    distance : float
        X = k0 x.
    steepness : float
        kp Hs/2.

    Returns
    -------
    array, 0..1
        exp(-s^2/2), s^2 = `PHASE_LOSS` steepness^3 X O^2.3 for O > 0, and 1 below the carrier.

    Notes
    -----
    Short waves ride on long ones, and no envelope equation follows their phase for ever.  The
    form is empirical, measured on fully nonlinear long-crested seas (``python
    benchmarks/forward_run.py`` prints the comparison); times the run it is the conditional mean
    of the wave at the target.

    Examples
    --------
    >>> phase_coherence(np.array([-0.2, 0.0, 0.6]), 63.0, 0.085).round(2)
    array([1.  , 1.  , 0.87])
    """
    excess = np.clip(offset, 0, None)
    return np.exp(-0.5 * PHASE_LOSS * steepness**3 * distance * excess**2.3)


class ForwardRun:
    """One envelope, one equation, ready to be marched.

    Parameters
    ----------
    envelope : Envelope
        At the sensor; values (n,) on a periodic time grid with an empty margin long enough for
        the fastest and slowest waves kept.
    equation : str
        A key of `EQUATIONS`.
    stepper : str
        A key of `STEPPERS`.
    kept : (low, high)
        Frequencies over the carrier that the run keeps, on either side of 1.
    step : float
        Longest step in X = k0 x.

    Raises
    ------
    InputError
        For an unknown equation or stepper, a step that is not positive, or a kept band that
        does not hold the carrier.

    Notes
    -----
    The linear part is an integrating factor.  The action, integral of |a|^2 dT, is conserved by
    every equation; `march` refuses a run that changes it by more than 2 %.
    """

    def __init__(self, envelope, *, equation="dysthe-pair", stepper="rk4", kept=KEPT, step=STEP):
        if equation not in EQUATIONS:
            raise InputError(f"equation must be one of {', '.join(EQUATIONS)}, got {equation!r}")
        if stepper not in STEPPERS:
            raise InputError(f"stepper must be one of {', '.join(STEPPERS)}, got {stepper!r}")
        if not (np.isfinite(step) and step > 0):
            raise InputError(f"step must be a positive length in X = k0 x, got {step!r}")
        if not 0 < kept[0] < 1 < kept[1]:
            raise InputError(f"kept must hold the carrier: 0 < low < 1 < high, got {kept!r}")
        self.envelope = envelope
        self.equation = EQUATIONS[equation]
        self.stepper = STEPPERS[stepper]
        self.step = step
        n = envelope.values.shape[-1]
        omega0, k0, depth = envelope.omega0, envelope.k0, envelope.depth
        self._offset = -2 * np.pi * fft.fftfreq(n, envelope.dt) / omega0
        self._kept = (1 + self._offset > kept[0]) & (1 + self._offset < kept[1])
        omega = omega0 * np.where(self._kept, 1 + self._offset, 1.0)
        kh = k0 * depth
        ratio = float(group_ratio(kh))
        self.group_velocity = omega0 / k0 * ratio
        # exact dispersion less what the moving frame takes away, per unit X
        phase = wavenumber(omega, depth) / k0 - 1 - (omega / omega0 - 1) / ratio
        self._linear_rate = np.where(self._kept, phase, 0.0)
        self._strength = 1.0
        if np.isfinite(depth):
            self._strength = float(nonlinear_coefficient(kh)) / (2 * ratio * np.tanh(kh))
        self._spectrum = fft.fft(k0 * envelope.values) * self._kept
        # what is made of a, and of |a|^2: its slope and mean flow share one transform
        self._of_a = np.stack([np.ones(n), -1j * self._offset])
        self._of_intensity = (-1j * self._offset + 1j * np.abs(self._offset))[None]
        if self.equation.pair_dispersion:
            self._prepare_pair_dispersion()
            self._of_a = np.vstack([self._of_a, self._residual])
            self._of_intensity = np.vstack([self._of_intensity, self._smoothing])

    def _prepare_pair_dispersion(self):
        self._smoothing = np.exp(-0.5 * (self._offset * 2 * np.pi * PAIR_SMOOTHING) ** 2)
        power = np.abs(self._spectrum) ** 2
        total = power.sum()
        self._residual = np.zeros(power.size)
        self._typical = 0.0
        if total > 0:
            used = self._kept
            self._residual[used] = pair_residual(self._offset[used], power[used] / total)
            intensity = np.abs(fft.ifft(self._spectrum)) ** 2
            smooth = fft.ifft(self._smoothing * fft.fft(intensity)).real
            self._typical = float((smooth * intensity).sum() / intensity.sum())
        # the shift at the typical intensity is exact, with the linear part: only what the
        # intensity varies about it is left to the stepper
        rate = self._strength * self._typical * self._residual
        self._linear_rate = self._linear_rate - rate
        fastest = np.abs(rate).max()
        if fastest > 0:
            self.step = min(self.step, STEP_RATE / fastest)

    def _nonlinear(self, spectrum):
        equation = self.equation
        if not equation.dysthe:
            a = fft.ifft(spectrum)
            intensity = a.real**2 + a.imag**2
            return fft.fft(-1j * self._strength * intensity * a) * self._kept
        fields = fft.ifft(self._of_a * spectrum, axis=-1, overwrite_x=True)
        a, a_t = fields[:2]
        intensity = a.real**2 + a.imag**2
        slow = fft.ifft(self._of_intensity * fft.fft(intensity), axis=-1, overwrite_x=True)
        rates = np.empty((1 + equation.pair_dispersion, a.size), complex)
        np.multiply(2 * slow[0] - 1j * intensity, a, out=rates[0])
        rates[0] += (6 * intensity) * a_t
        if equation.pair_dispersion:
            smooth = slow[1].real - self._typical
            rates[0] -= 0.5j * smooth * fields[2]
            np.multiply(smooth, a, out=rates[1])
        modes = fft.fft(rates, axis=-1, overwrite_x=True)
        if equation.pair_dispersion:
            modes[0] -= 0.5j * self._residual * modes[1]
        modes[0] *= self._strength * self._kept
        return modes[0]

    def march(self, distances):
        """Envelopes downwave.

        Parameters
        ----------
        distances : (m,) array_like [m]
            Not negative, increasing.

        Returns
        -------
        tuple of m Envelope
            At each distance, on a time grid that moves with the carrier's group velocity; the
            carrier's phase k0 x is included, so that eta = Re{A exp(-i omega0 t)} there.

        Raises
        ------
        InputError
            For distances that are negative or not increasing.
        NumericsError
            If the action is not conserved within 2 %; carries the relative change.
        """
        distances = np.atleast_1d(np.asarray(distances, float))
        if not np.isfinite(distances).all() or (distances < 0).any():
            raise InputError(f"distances must be finite and not negative, got {distances.min()!r}")
        if (np.diff(distances) <= 0).any():
            raise InputError("distances must increase")
        k0 = self.envelope.k0
        spectrum = self._spectrum
        action = np.vdot(spectrum, spectrum).real
        downwave = []
        place = 0.0
        for distance in distances:
            length = k0 * (distance - place)
            if not (self.equation.cubic or self.equation.dysthe):
                spectrum = np.exp(1j * self._linear_rate * length) * spectrum
            elif length > 0:
                steps = int(np.ceil(length / self.step))
                with np.errstate(over="ignore", invalid="ignore"):  # judged by the action below
                    turn = self._turns(length / steps)
                    for _ in range(steps):
                        spectrum = self._advance(spectrum, length / steps, turn)
            place = distance
            drift = np.vdot(spectrum, spectrum).real / action - 1 if action > 0 else 0.0
            if not abs(drift) < 0.02:
                raise NumericsError(
                    f"the forward run changed the waves' action by {drift:.1%} on the way to "
                    f"{distance:g} m; a sea this steep needs a shorter step or a shorter distance",
                    achieved=drift,
                )
            values = fft.ifft(spectrum) * (np.exp(1j * k0 * distance) / k0)
            start = self.envelope.start + distance / self.group_velocity
            downwave.append(replace(self.envelope, values=values, start=start))
        return tuple(downwave)

    def expected(self, downwave: Envelope, steepness: float) -> Envelope:
        """The expected wave: each component of a run's result times its `phase_coherence`.

        Parameters
        ----------
        downwave : Envelope
            One of the results of `march`.
        steepness : float
            kp Hs/2 of the sea.
        """
        travelled = (downwave.start - self.envelope.start) * self.group_velocity
        kept = phase_coherence(self._offset, self.envelope.k0 * travelled, steepness)
        return replace(downwave, values=fft.ifft(kept * fft.fft(downwave.values)))

    def _turns(self, h):
        """Exact linear change over each part of a step that the scheme needs."""
        nodes = {*self.stepper.nodes, 1}
        return {node: np.exp(1j * self._linear_rate * (node * h)) for node in nodes}

    def _advance(self, spectrum, h, turn):
        """One step of the integrating-factor Runge-Kutta scheme."""
        scheme = self.stepper
        stages = []
        result = spectrum.copy()
        for node, row, weight in zip(scheme.nodes, scheme.matrix, scheme.weights, strict=True):
            state = spectrum
            for coefficient, stage in zip(row, stages, strict=True):
                if coefficient:
                    state = state + (h * coefficient) * stage
            stage = self._nonlinear(turn[node] * state) * turn[node].conj()
            stages.append(stage)
            result += (h * weight) * stage
        return turn[1] * result
