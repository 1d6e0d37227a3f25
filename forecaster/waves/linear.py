"""Linear (Airy) waves in water of any depth: dispersion, speeds, steepness.

``depth=inf`` is deep water.  All functions take arrays and broadcast.
"""

from __future__ import annotations

import numpy as np

from forecaster.errors import InputError

GRAVITY = 9.81  # m/s^2


def wavenumber(omega, depth=np.inf):
    """Wavenumber of a linear wave of angular frequency `omega`.

    Parameters
    ----------
    omega : array_like [rad/s]
        Not negative.
    depth : array_like [m]
        Positive; ``inf`` for deep water.

    Returns
    -------
    array [rad/m]
        k with omega^2 = g k tanh(k depth), to machine precision.

    Raises
    ------
    InputError
        For a depth that is not positive or a frequency that is negative or not finite.

    Notes
    -----
    Newton's iteration on k h tanh(k h) = omega^2 h / g from the deep/shallow blend
    k h = x / sqrt(tanh(x)), x = omega^2 h / g; the function is convex there and five steps reach
    rounding.  Valid for infinitesimal waves.  Source: Airy (1845); Dean & Dalrymple (1991),
    eq. 3.34.

    Examples
    --------
    >>> round(float(2 * np.pi / wavenumber(2 * np.pi / 10.0, 20.0)), 3)
    121.237
    """
    omega, depth = np.broadcast_arrays(np.asarray(omega, float), np.asarray(depth, float))
    if not (depth > 0).all():
        raise InputError(f"depth must be positive metres (inf for deep), got {depth.min()!r}")
    if not (np.isfinite(omega) & (omega >= 0)).all():
        raise InputError("omega must be finite and not negative [rad/s]")
    deep = omega**2 / GRAVITY
    shallow = np.isfinite(depth) & (deep * np.where(np.isfinite(depth), depth, 0) < 40)
    shallow &= omega > 0
    result = np.array(deep)
    x = deep[shallow] * depth[shallow]
    kh = x / np.sqrt(np.tanh(x))
    for _ in range(6):
        t = np.tanh(kh)
        kh = kh - (kh * t - x) / (t + kh * (1 - t**2))
    result[shallow] = kh / depth[shallow]
    return result[()]


def angular_frequency(k, depth=np.inf):
    """Angular frequency [rad/s] of a linear wave of wavenumber `k` [rad/m] in `depth` [m].

    omega = sqrt(g k tanh(k depth)) (Airy 1845).

    >>> round(float(angular_frequency(wavenumber(0.7, 35.0), 35.0)), 12)
    0.7
    """
    k = np.asarray(k, float)
    return np.sqrt(GRAVITY * k * np.tanh(k * np.asarray(depth, float)))


def group_ratio(kh):
    """Ratio n of group to phase speed at relative depth `kh`: 1/2 deep, 1 shallow.

    n = (1 + 2 kh / sinh 2kh) / 2 (Dean & Dalrymple 1991, eq. 4.82).

    >>> float(group_ratio(np.inf)), round(float(group_ratio(1.0365)), 4)
    (0.5, 0.765)
    """
    kh = np.asarray(kh, float)
    inner = np.minimum(2 * kh, 700.0)
    ratio = np.where(inner > 0, inner / np.sinh(np.where(inner > 0, inner, 1.0)), 1.0)
    return 0.5 * (1 + ratio)


def phase_speed(omega, depth=np.inf):
    """Phase speed [m/s] of a linear wave of angular frequency `omega` [rad/s] in `depth` [m].

    >>> round(float(phase_speed(2 * np.pi / 10)), 3)
    15.613
    """
    return np.asarray(omega, float) / wavenumber(omega, depth)


def group_velocity(omega, depth=np.inf):
    """Group velocity [m/s] of a linear wave of angular frequency `omega` [rad/s] in `depth` [m].

    >>> round(float(group_velocity(2 * np.pi / 10, 20.0)), 4)
    9.2745
    """
    k = wavenumber(omega, depth)
    return np.asarray(omega, float) / k * group_ratio(k * np.asarray(depth, float))


def nonlinear_coefficient(kh):
    """Cubic coefficient X of narrow-band waves at relative depth `kh`, 1 in deep water.

    X = (9 T^4 - 10 T^2 + 9)/(8 T^3) - [(2 n - 1/2)^2 c^2 / (g h - cg^2) + 1]/(k h),
    T = tanh kh, with c^2 = (g/k) T and cg = n c.

    Zero at kh = 1.363, negative (defocusing) below.  Valid for a narrow spectrum and kh above
    about 0.5; note how slowly it reaches its deep value: 0.95 at kh = 20.

    Source: Hasimoto & Ono (1972); Janssen & Onorato (2007), J. Phys. Oceanogr. 37, eq. 21.

    >>> [round(float(nonlinear_coefficient(x)), 4) for x in (2.0, 5.0, 20.0)]
    [0.4239, 0.7895, 0.9494]
    """
    kh = np.asarray(kh, float)
    if not (kh > 0).all():
        raise InputError(f"kh must be positive, got {kh.min()!r}")
    finite = np.where(np.isfinite(kh), kh, 1.0)
    t = np.tanh(finite)
    n = group_ratio(finite)
    # in units of c = 1: g h = kh / T
    set_down = (2 * n - 0.5) ** 2 / (finite / t - n**2) + 1
    x = (9 * t**4 - 10 * t**2 + 9) / (8 * t**3) - set_down / finite
    return np.where(np.isfinite(kh), x, 1.0)[()]
