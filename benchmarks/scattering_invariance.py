"""How far the integrable picture holds: drift of the eigenvalues of isolated waves downwave.

    python benchmarks/scattering_invariance.py [--seas N] [--figure FILE]

Waves that are alone on a long line run downwave: in the fully nonlinear engine, and, from the
first gauge of that engine on, by each equation of `EQUATIONS`.  Drift is the change from the first
gauge on of the largest eigenvalue.

Packets: sech(T/tau) of steepness k0 a and |q| tau = 1.4.  In the cubic equation nothing but k0 a
tells such packets apart, so that they show the effect of steepness alone.  Drift of the imaginary
part, which is the height of the soliton, in per cent of it, and of the group speed that the real
part means, in per cent of the carrier's.

Trains: 24 peak periods of N random seas (JONSWAP, gamma 3.3) of steepness kp Hs/2, as broad as a
sea, and still isolated.  Root mean square drift of the soliton's height in per cent of Hs.  The
column "group, nls" is the largest eigenvalue of any group that `group_content` cuts out of the
train in the exact cubic run, where the eigenvalues of the whole do not change.

Records: the largest eigenvalue of a record cut out of a long random sea that obeys the cubic
equation exactly, and of the record 20 wavelengths downwave that moves with the carrier's group
speed: what waves that enter and leave at the ends do to it (12 seeds).

Shares: how much of the energy of a random sea (linear, 12 seeds) its discrete eigenvalues carry, by
the length of the record.

Without a choice the figure goes to docs/scattering-invariance.png.  Set OMP_NUM_THREADS=1 and
OPENBLAS_NUM_THREADS=1 for one core.
"""

from __future__ import annotations

import argparse
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
from bench_scattering import sea
from matplotlib.figure import Figure

from forecaster.datatypes import Envelope
from forecaster.plots import image_bytes
from forecaster.waves.envelope import free_envelope
from forecaster.waves.hos import FullyNonlinearSea, Surface
from forecaster.waves.linear import GRAVITY
from forecaster.waves.propagate import ForwardRun
from forecaster.waves.scattering import (
    continuous_energy,
    discrete_spectrum,
    group_content,
    scaled_envelope,
)
from forecaster.waves.spectrum import jonswap

PERIOD = 10.0  # s; all else is in periods and wavelengths
OMEGA = 2 * np.pi / PERIOD
WAVELENGTH = GRAVITY * PERIOD**2 / (2 * np.pi)
K0 = 2 * np.pi / WAVELENGTH
MODES, SAMPLES, STEPS = 8, 16, 2  # a wavelength, a period, a sample
RAMP = 8.0  # periods in which nonlinear terms grow
EQUATIONS = ("nls", "dysthe", "dysthe-pair")
HOS, WINDOWS = "fully nonlinear", "group, nls"

PACKETS = (0.06, 0.08, 0.10, 0.12, 0.15, 0.18)  # k0 a
PACKET_DISTANCES = (10.0, 20.0, 30.0)  # wavelengths
NONLINEARITY = 1.4  # one soliton of Im l = 0.9/tau, and a little that disperses
REACH = 6.0  # half length of the packet in tau

TRAINS = (0.06, 0.09, 0.12)  # kp Hs/2
TRAIN_DISTANCES = (5.0, 10.0, 20.0)
TRAIN = 12.0  # wavelengths
BAND = (0.5, 1.9)  # of the peak frequency

LENGTHS = (32, 64, 128, 256)  # of records, in periods
SEA_PERIODS = 512
SEEDS = 12

FIGURE = Path(__file__).parents[1] / "docs" / "scattering-invariance.png"
COLOURS = {"nls": "#222222", "dysthe": "#56B4E9", "dysthe-pair": "#0072B2", HOS: "#D55E00"}


def line(length):
    """A line of `length` wavelengths in deep water."""
    return FullyNonlinearSea(length * WAVELENGTH, peak_wavenumber=K0, modes=round(MODES * length))


def wavenumbers(water):
    return 2 * np.pi * np.fft.fftfreq(water.points, water.length / water.points)


def gauge_records(water, zeta, gauges, first, duration):
    """(g, n) elevation at `gauges` [wavelengths] from the times `first` [periods] on.

    zeta (points,) is the analytic signal along the line of the linear waves at the start.
    """
    k = wavenumbers(water)
    modes = np.where(k > 0, np.fft.fft(zeta), 0)
    flow = -1j * np.sqrt(GRAVITY / np.where(k > 0, k, 1.0)) * modes
    n = round(duration * SAMPLES)
    begin = np.maximum(0, np.rint(np.asarray(first) * SAMPLES).astype(int))
    elevation, _ = water.march(
        Surface(np.fft.ifft(modes).real, np.fft.ifft(flow).real),
        step=PERIOD / SAMPLES / STEPS,
        samples=begin[-1] + n,
        steps_per_sample=STEPS,
        ramp=RAMP * PERIOD,
        places=np.rint(gauges * WAVELENGTH / water.length * water.points).astype(int),
    )
    return np.array([elevation[b : b + n, i] for i, b in enumerate(begin)])


def packet_records(steepness):
    """Elevation of a packet at 0 and `PACKET_DISTANCES`, each about its passage."""
    tau = NONLINEARITY * np.sqrt(2) / steepness / (2 * np.pi)  # periods
    half = REACH * tau / 2  # wavelengths: a group moves half as fast as its waves
    gauges = 2 * half + 0.5 * RAMP + np.array([0.0, *PACKET_DISTANCES])
    water = line(np.ceil(gauges[-1] + half))
    x = water.x / WAVELENGTH
    zeta = steepness / K0 / np.cosh((x - half) / (tau / 2)) * np.exp(2j * np.pi * x)
    aside = REACH * tau + 6
    return gauge_records(water, zeta, gauges, 2 * (gauges - half) - aside, 2 * aside)


def train_records(steepness, seed):
    """Elevation of a train of random waves at 0 and `TRAIN_DISTANCES`."""
    centre, half = 0.5 * TRAIN + 6, 0.5 * TRAIN + 1  # with the edges, half a cosine each
    gauges = centre + half + 0.5 * RAMP + np.array([0.0, *TRAIN_DISTANCES])
    water = line(110)
    k = wavenumbers(water)
    omega = np.sqrt(GRAVITY * np.abs(k))
    used = (k > 0) & (omega > BAND[0] * OMEGA) & (omega < BAND[1] * OMEGA)
    density = np.zeros(water.points)
    density[used] = jonswap(omega[used] / (2 * np.pi), hs=1.0, tp=PERIOD) / omega[used]
    generator = np.random.default_rng(seed)
    drawn = generator.normal(size=(2, water.points))
    zeta = np.fft.ifft(np.sqrt(density) * (drawn[0] + 1j * drawn[1]))
    edge = np.clip((half - np.abs(water.x / WAVELENGTH - centre)) / 2, 0, 1)
    inside = edge == 1
    deviation = np.sqrt(0.5 * np.mean(np.abs(zeta[inside]) ** 2))
    zeta *= np.sin(0.5 * np.pi * edge) ** 2 * steepness / (2 * K0 * deviation)
    # from the fast waves of the front to the slow ones of the back
    first, last = 1.3 * (gauges - centre - half), 4.0 * (gauges - centre + half)
    return gauge_records(water, zeta, gauges, first, (last - first).max())


def largest(envelope):
    """Eigenvalue of largest imaginary part; 0 if there is none."""
    q, dt = scaled_envelope(envelope)
    return next(iter(discrete_spectrum(q, dt, order=8)), 0j)


def largest_of_groups(envelope):
    """The same of the windows of its groups."""
    found = [value for group in group_content(envelope) for value in group.eigenvalues]
    return max(found, key=lambda value: value.imag, default=0j)


def followed(records, distances, margin):
    """{name: (1 + m,) largest eigenvalue} of the waves recorded at 0 and `distances`."""
    envelopes = [
        free_envelope(record, PERIOD / SAMPLES, omega0=OMEGA, margin=margin * PERIOD)
        for record in records
    ]
    found = {HOS: [largest(envelope) for envelope in envelopes]}
    for equation in EQUATIONS:
        run = ForwardRun(envelopes[0], equation=equation, step=0.25)
        downwave = run.march([0.0, *(d * 2 * np.pi / envelopes[0].k0 for d in distances)])
        found[equation] = [largest(envelope) for envelope in downwave]
        if equation == "nls":
            found[WINDOWS] = [largest_of_groups(envelope) for envelope in downwave]
    return {name: np.array(values) for name, values in found.items()}


def packet_drift(steepness):
    """{name: (2, m)}: change in % of height and group speed."""
    found = followed(packet_records(steepness), PACKET_DISTANCES, 40)
    return {
        name: 100 * np.array(
            [
                values.imag[1:] / values.imag[0] - 1,
                1 / (1 - 2 * values.real[1:]) - 1 / (1 - 2 * values.real[0]),
            ]
        )
        for name, values in found.items()
    }  # fmt: skip


def train_drift(steepness, seas):
    """{name: (1 + m,)}: mean height of the soliton at the start, rms change of it, in % of Hs."""
    each = [followed(train_records(steepness, seed), TRAIN_DISTANCES, 60) for seed in range(seas)]
    per_hs = 100 * 4 * np.sqrt(2) / (2 * steepness)  # of 4 sqrt(2) Im l/k0 in Hs = 2 steepness/k0
    result = {}
    for name in each[0]:
        height = per_hs * np.array([found[name].imag for found in each])
        change = height[:, 1:] - height[:, :1]
        result[name] = np.array([height[:, 0].mean(), *np.sqrt((change**2).mean(axis=0))])
    return result


def print_packets(rows):
    names = (*EQUATIONS, HOS)
    print("Packets: drift of the largest eigenvalue [%], height / group speed")
    print(f"{'k0 a':>7} {'wavelengths':>12}" + "".join(f"{name:>18}" for name in names))
    for steepness, found in rows.items():
        for i, distance in enumerate(PACKET_DISTANCES):
            cells = (f"{found[n][0, i]:+.2f} / {found[n][1, i]:+.2f}" for n in names)
            print(f"{steepness:>7.2f} {distance:>12.0f}" + "".join(f"{c:>18}" for c in cells))


def print_trains(rows, seas):
    names = (*EQUATIONS, HOS, WINDOWS)
    print(f"\nTrains of {seas} random seas: rms change of the largest soliton's height [% of Hs]")
    print(f"{'kp Hs/2':>7} {'wavelengths':>12}" + "".join(f"{name:>18}" for name in names))
    for steepness, found in rows.items():
        heights = f"(mean height {found[HOS][0]:.0f}, of groups {found[WINDOWS][0]:.0f} % of Hs)"
        for i, distance in enumerate(TRAIN_DISTANCES, start=1):
            cells = "".join(f"{found[name][i]:>18.2f}" for name in names)
            print(f"{steepness:>7.2f} {distance:>12.0f}{cells}  {heights if i == 1 else ''}")


def print_records():
    print("\nRecords cut out of a sea, nls: rms change of the largest soliton's height [% of Hs]")
    print(f"{'kp Hs/2':>7} {'wavelengths':>12}" + "".join(f"{p:>10} periods" for p in LENGTHS))
    for steepness in TRAINS:
        change = []
        for seed in range(SEEDS):
            q, dt = sea(seed, SEA_PERIODS, steepness)
            start = Envelope(np.conj(q) * np.sqrt(2) / K0, dt / OMEGA, 0.0, OMEGA, K0)
            run = ForwardRun(start, equation="nls", step=0.5)
            here, there = run.march([0.0, TRAIN_DISTANCES[-1] * WAVELENGTH])
            change.append([])
            for periods in LENGTHS:
                middle, half = q.size // 2, round(periods * np.pi / dt)
                cut = slice(middle - half, middle + half)
                ends = [largest(replace(e, values=e.values[cut])).imag for e in (here, there)]
                change[-1].append(100 * 4 * np.sqrt(2) * (ends[1] - ends[0]) / (2 * steepness))
        rms = np.sqrt(np.mean(np.square(change), axis=0))
        cells = "".join(f"{value:>18.2f}" for value in rms)
        print(f"{steepness:>7.2f} {TRAIN_DISTANCES[-1]:>12.0f}{cells}")


def print_shares():
    print(
        "\nShares: energy in discrete eigenvalues / in the continuous part [%], and largest height"
    )
    print(
        f"{'kp Hs/2':>7} {'periods':>12}{'discrete':>18}{'continuous':>18}{'height [% of Hs]':>18}"
    )
    for steepness in (0.05, 0.10):
        for periods in LENGTHS:
            found = []
            for seed in range(SEEDS):
                q, dt = sea(seed, periods, steepness)
                energy = (np.abs(q) ** 2).sum() * dt
                imaginary = discrete_spectrum(q, dt).imag
                height = 4 * np.sqrt(2) * imaginary.max(initial=0) / (2 * steepness)
                shares = 4 * imaginary.sum() / energy, continuous_energy(q, dt) / energy
                found.append([*shares, height])
            cells = "".join(f"{100 * value:>18.0f}" for value in np.mean(found, axis=0))
            print(f"{steepness:>7.2f} {periods:>12}{cells}")


def draw(packets, trains):
    figure = Figure(figsize=(9.5, 4.0), layout="constrained")
    left, right = figure.subplots(1, 2)
    for name, colour in COLOURS.items():
        style = {"color": colour, "marker": "o", "ms": 4, "label": name}
        left.plot(PACKETS, [packets[s][name][0, -1] for s in PACKETS], **style)
        right.plot(TRAINS, [trains[s][name][-1] for s in TRAINS], **style)
    right.plot(
        TRAINS, [trains[s][WINDOWS][-1] for s in TRAINS],
        color="#999999", ls="--", marker="s", ms=4, label="a group cut out of it, nls",
    )  # fmt: skip
    left.axhline(0, color="#bbbbbb", lw=0.6, zorder=0)
    left.set_title(
        f"Smooth packet, {PACKET_DISTANCES[-1]:.0f} wavelengths", fontsize=10, loc="left"
    )
    left.set_xlabel("steepness of the packet, k0 a")
    left.set_ylabel("change of the soliton's height [%]")
    right.set_ylim(bottom=-0.5)
    right.set_ylabel("rms change of the soliton's height [% of Hs]")
    right.set_title(
        f"24 periods of a random sea, {TRAIN_DISTANCES[-1]:.0f} wavelengths",
        fontsize=10, loc="left",
    )  # fmt: skip
    right.set_xlabel("steepness of the sea, kp Hs/2")
    right.legend(frameon=False, fontsize=9)
    return figure


def main():
    parser = argparse.ArgumentParser(description="Drift of eigenvalues downwave.")
    parser.add_argument("--seas", type=int, default=6, help="trains of each steepness")
    parser.add_argument("--figure", type=Path, default=FIGURE)
    arguments = parser.parse_args()
    clock = time.perf_counter()
    packets = {steepness: packet_drift(steepness) for steepness in PACKETS}
    print_packets(packets)
    exact = max(
        np.abs(packets[steepness]["nls"]).max() for steepness in PACKETS if steepness < 0.14
    )
    print(f"largest drift in the cubic equation, k0 a up to 0.12: {exact / 100:.0e}")
    trains = {steepness: train_drift(steepness, arguments.seas) for steepness in TRAINS}
    print_trains(trains, arguments.seas)
    print_records()
    print_shares()
    arguments.figure.write_bytes(image_bytes(draw(packets, trains), "png"))
    print(f"{time.perf_counter() - clock:.0f} s")


if __name__ == "__main__":
    main()
