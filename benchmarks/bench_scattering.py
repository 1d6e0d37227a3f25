"""Speed and accuracy of the scattering transform, measured in one run.

    python benchmarks/bench_scattering.py

Set OMP_NUM_THREADS=1 and OPENBLAS_NUM_THREADS=1 for one core.  Best of several repetitions.
"""

from __future__ import annotations

import cProfile
import pstats
import time
from functools import partial

import numpy as np
from scipy.integrate import solve_ivp
from scipy.linalg import eigvals
from scipy.stats import spearmanr

from forecaster.datatypes import Envelope
from forecaster.learning.features import FLUX_WINDOWS, WINDOW_STEP_PERIODS
from forecaster.waves import scattering
from forecaster.waves.scattering import (
    discrete_spectrum,
    focusing,
    periodic_spectrum,
    segment_groups,
    windowed_content,
    windowed_energy,
)

PER_PERIOD = 8


def sea(seed, periods, steepness=0.1, gamma=3.3):
    """(q, dt): scaled envelope of a random JONSWAP sea, linear, 8 samples a peak period."""
    rng = np.random.default_rng(seed)
    n, dt = periods * PER_PERIOD, 2 * np.pi / PER_PERIOD
    r = 1 + 2 * np.pi * np.fft.fftfreq(n, dt)
    inside = (r > 0.3) & (r < 3)
    r = np.where(inside, r, 1.0)
    density = r**-5 * np.exp(-1.25 * r**-4)
    density *= gamma ** np.exp(-0.5 * ((r - 1) / np.where(r < 1, 0.07, 0.09)) ** 2)
    density = np.where(inside, density, 0.0)
    q = np.fft.ifft(np.sqrt(density / 2) * (rng.normal(size=n) + 1j * rng.normal(size=n)))
    return q * (steepness / 2) * n / np.sqrt(density.sum()), dt


def best(call, repeat):
    """(shortest seconds, last result) of `repeat` calls."""
    shortest = np.inf
    for _ in range(repeat):
        start = time.perf_counter()
        result = call()
        shortest = min(shortest, time.perf_counter() - start)
    return shortest, result


def dense(q, dt):
    """All eigenvalues of the Fourier collocation matrix of the Zakharov-Shabat problem."""
    n = q.size
    omega = 2 * np.pi * np.fft.fftfreq(n, dt)
    derivative = np.fft.ifft(1j * omega[:, None] * np.fft.fft(np.eye(n), axis=0), axis=0)
    return eigvals(
        np.block([[1j * derivative, -1j * np.diag(q)], [-1j * np.diag(q.conj()), -1j * derivative]])
    )


def error(q, dt, lam):
    """|a/a'| at lam: distance from the true eigenvalue, by an adaptive Runge-Kutta method."""
    modes, omega = np.fft.fft(q) / q.size, 2j * np.pi * np.fft.fftfreq(q.size, dt)
    points = lam + 1e-5 * np.array([-1, 0, 1])

    def slope(t, v):
        here = modes @ np.exp(omega * t)
        return np.concatenate([here * v[3:], 2j * points * v[3:] - np.conj(here) * v[:3]])

    start = np.array([1, 1, 1, 0, 0, 0], complex)
    ends = (-dt / 2, (q.size - 0.5) * dt)
    a = solve_ivp(slope, ends, start, "DOP853", rtol=1e-11, atol=1e-13).y[:3, -1]
    return abs(a[1] / ((a[2] - a[0]) / 2e-5))


def windows_against_dense():
    n = 128
    q, dt = sea(4, 180, steepness=0.12)
    taper = np.sin(np.pi * (np.arange(n) + 0.5) / n) ** 2
    windows = [q[i : i + n] * taper for i in np.linspace(0, q.size - n, 30).astype(int)]
    slow, _ = best(lambda: dense(windows[0], dt), 5)
    single = np.median(
        [best(lambda w=window: discrete_spectrum(w, dt, order=4), 10)[0] for window in windows]
    )
    levels = scattering._levels(np.array(windows), 4)
    batch, found = best(lambda: scattering._eigenvalues(levels, dt, 0.02), 10)
    errors = {"dense": [], "order 4": [], "order 6": []}
    for i, window in enumerate(windows):
        if found[i].size == 0 or found[i][0].imag < 0.02:
            continue
        values = dense(window, dt)
        sixth = discrete_spectrum(window, dt, order=6)[0]
        nearest = values[np.argmin(np.abs(values - sixth))]
        for name, value in zip(errors, (nearest, found[i][0], sixth), strict=True):
            errors[name].append(error(window, dt, value) / sixth.imag)
    print(f"128-sample windows of a sea (steepness 0.12), {len(errors['dense'])} with solitons")
    print(f"  dense matrix, one window      {slow * 1e3:9.2f} ms")
    print(f"  one at a time, certified      {single * 1e3:9.2f} ms   {slow / single:7.0f} x faster")
    print(
        f"  30 windows, certified, each   {batch / 30 * 1e3:9.2f} ms   "
        f"{slow / (batch / 30):7.0f} x faster"
    )
    for name, values in errors.items():
        print(f"  largest relative error of the largest eigenvalue, {name:8s} {max(values):.1e}")


def whole_record():
    q, dt = sea(1, 180)
    period = 2 * np.pi
    end = q.size * dt
    groups = np.arange(0, end, WINDOW_STEP_PERIODS * period)
    steps = {
        "whole record": lambda: discrete_spectrum(q, dt, order=4),
        f"{groups.size} windows of 12 periods": lambda: windowed_content(q, dt, groups),
    }
    for length, spacing in FLUX_WINDOWS.values():
        centres = np.arange(0, end, spacing * period)
        steps[f"energy by speed, {centres.size} windows of {length:g} periods"] = partial(
            windowed_energy, q, dt, centres, half_width=np.pi * length
        )
    print("30-minute record: 180 peak periods, 8 samples a period, steepness 0.10, certified")
    total = 0.0
    for name, call in steps.items():
        seconds, _ = best(call, 10)
        total += seconds
        print(f"  {name:46s}{seconds * 1e3:7.1f} ms")
    print(f"  {'all of these':46s}{total * 1e3:7.1f} ms (limit 100)")
    for name, call in {
        "whole record, order 6": lambda: discrete_spectrum(q, dt),
        "periodic spectrum": lambda: periodic_spectrum(q, dt, order=4),
    }.items():
        seconds, _ = best(call, 5)
        print(f"  {name:46s}{seconds * 1e3:7.1f} ms")
    profile = cProfile.Profile()
    repeat = 10
    profile.enable()
    for _ in range(repeat):
        for call in steps.values():
            call()
    profile.disable()
    entries = pstats.Stats(profile).stats
    cumulative = {key[2]: value[3] for key, value in entries.items() if "scattering" in key[0]}
    print("  where the time goes (profiled, all of these):")
    for name, words in (
        ("_transfer_polynomials", "transfer polynomials"),
        ("_contour_count", "certificate (argument principle)"),
        ("_guesses", "starting grid"),
        ("_polish", "polishing"),
        ("_separated", "boxes cut for what the grid missed"),
        ("_with_clusters", "multiple zeros"),
        ("focusing", "chirp and focusing"),
    ):
        print(f"    {words:44s}{cumulative.get(name, 0.0) / repeat * 1e3:7.1f} ms")


def regular_waves():
    """The hardest records: all eigenvalues crowd below one point."""
    print("regular waves, kA = 0.1: eigenvalues found, exact count, time")
    height, dt = 0.1 / np.sqrt(2), 2 * np.pi / PER_PERIOD
    for periods in (60, 120, 250):
        q = np.full(periods * PER_PERIOD, height)
        seconds, found = best(lambda q=q: discrete_spectrum(q, dt, order=4), 1)
        exact = int(height * q.size * dt / np.pi + 0.5)
        print(f"  {periods:4d} periods {found.size:6d} {exact:6d} {seconds * 1e3:9.1f} ms")


def linear_cost():
    print("cost of one spectral value (a and da/dlambda, 2000 at a time), order 4")
    lam = np.linspace(-0.3, 0.3, 2000) + 0.02j
    row = np.zeros(lam.size, int)
    for periods in (64, 128, 256, 512):
        q, dt = sea(0, periods)
        function = scattering._Jost(scattering._levels(q[None], 4), dt)
        seconds, _ = best(lambda f=function: f.at(row, lam), 5)
        each = seconds / lam.size
        print(
            f"  {q.size:5d} samples {each * 1e6:7.2f} us, {each / q.size * 1e9:6.2f} ns per sample"
        )


def focusing_skill():
    """Rank correlation of what a group's chirp says with what the cubic equation makes of it."""
    wavelengths, step = (5, 10, 20), 0.2 * 2 * np.pi
    signs, gains, growths = [], [], []
    for seed in range(30):
        for steepness in (0.05, 0.08, 0.12):
            q, dt = sea(seed, 180, steepness)
            k0 = 1 / 9.81
            groups = segment_groups(Envelope(np.conj(q) * np.sqrt(2) / k0, dt, 0.0, 1.0, k0))
            omega = 2 * np.pi * np.fft.fftfreq(q.size, dt)
            turn, field, later = np.exp(-1j * omega**2 * step), q, {}
            for i in range(1, 5 * max(wavelengths) + 1):
                field = field * np.exp(1j * step * np.abs(field) ** 2)
                field = np.fft.ifft(turn * np.fft.fft(field))
                field = field * np.exp(1j * step * np.abs(field) ** 2)
                if i / 5 in wavelengths:
                    later[i / 5] = np.abs(field)
            for first, stop in groups:
                part = q[first:stop]
                focus = focusing(part[None], dt)
                weight = np.abs(part) ** 2
                flux = (part.conj() * np.gradient(part, dt)).imag
                speed = 2 * (weight * flux).sum() / (weight**2).sum()
                peak = first + int(np.argmax(weight))
                growth = []
                for distance, height in later.items():
                    place = peak + round(speed * distance * 2 * np.pi / dt)
                    near = np.arange(place - 20, place + 21) % q.size
                    growth.append(height[near].max() / np.abs(q[peak]))
                signs.append(-focus.chirp[0])
                gains.append(focus.amplification[0])
                growths.append(growth)
    print(f"focusing of {len(signs)} groups of random seas: rank correlation with the growth")
    for i, distance in enumerate(wavelengths):
        growth = np.array(growths)[:, i]
        print(
            f"  after {distance:2d} wavelengths: chirp {spearmanr(signs, growth)[0]:5.2f}, "
            f"expected amplification {spearmanr(gains, growth)[0]:5.2f}"
        )


if __name__ == "__main__":
    windows_against_dense()
    whole_record()
    regular_waves()
    linear_cost()
    focusing_skill()
