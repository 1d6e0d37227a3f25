"""How well the forward run follows fully nonlinear long-crested seas.

    python benchmarks/forward_run.py [--seas N] [--folder FOLDER] [--sensors M]

Prints two tables.  The first: correlation of predicted and true elevation at 2.5, 5, 10 and 20
peak wavelengths downwave, by steepness kp Hs/2, for every equation of `propagate.EQUATIONS` and
for the expected wave (`ForwardRun.expected` of "dysthe-pair").  The second: the share of each
frequency that the run still has in phase, beside `propagate.phase_coherence`, and the
least-squares value of its constant `PHASE_LOSS`.

A sensor records the first 70 peak periods at its gauge.  The correlation is taken over the
covered core: times at which the waves of 0.8 to 1.5 times the peak frequency left the sensor
within the record.  The share in phase is Re <T conj(P)> / <|P|^2>, P and T the Fourier
coefficients of the predicted and the true free waves under a Hann window over the times at which
that frequency left the sensor within the record: the factor that makes P the best estimate of T.

FOLDER holds shards of members of a fully nonlinear recipe; without it N seas are simulated here
(about 5 s each): gamma log-uniform 1 .. 10, steepness uniform 0.04 .. 0.14, 30 periods settling.
A constant fitted on seas that also verify the forecast would flatter it: fit on training seas.
"""

from __future__ import annotations

import argparse
import time
from itertools import pairwise
from pathlib import Path

import numpy as np
from scipy.optimize import minimize_scalar

from forecaster.learning.ensemble import PEAK_PERIOD, simulate
from forecaster.settings import SeaRecipe, settings_from_table
from forecaster.waves import propagate
from forecaster.waves.envelope import elevation_of, free_envelope
from forecaster.waves.linear import GRAVITY, group_velocity
from forecaster.waves.propagate import EQUATIONS, ForwardRun, phase_coherence
from forecaster.waves.spectrum import sea_state

# the frozen verification seas are drawn alike from another seed: a constant is fitted here
RECIPE = settings_from_table(
    SeaRecipe,
    {
        "engine": "hos",
        "members": 10**6,
        "root_seed": 20260,
        "steepness": [0.04, 0.14],
        "gamma": [1.0, 10.0],
        "settling_periods": [30.0, 30.0],
        "second_system_share": 0.0,
        "duration_periods": 150.0,
        "after_periods": 80.0,
        "samples_per_period": 16,
        "gauges": 48,
        "gauge_spacing_wavelengths": 2.5,
        "views": {"record_periods": [70.0, 70.0]},
    },
)
WAVELENGTH = GRAVITY * PEAK_PERIOD**2 / (2 * np.pi)
DISTANCES = (2.5, 5.0, 10.0, 20.0)  # peak wavelengths
CLASSES = ((0.04, 0.07), (0.07, 0.10), (0.10, 0.14))
RECORD_PERIODS = 70.0
MARGIN = 32 * PEAK_PERIOD
CORE = (0.8, 1.5)  # of the peak frequency
BANDS = np.round(np.arange(0.6, 2.25, 0.1), 1)  # edges, of the carrier frequency
PREDICTIONS = (*EQUATIONS, "expected")


def members(folder, count):
    """Yield up to `count` members: of the shards in `folder`, else simulated here."""
    if folder is None:
        for member in range(count):
            yield simulate(RECIPE, member)
        return
    shards = sorted(Path(folder).glob("*.npz"))[:count]
    if not shards:
        raise SystemExit(f"no *.npz shards in {folder}")
    for shard in shards:
        with np.load(shard) as arrays:
            yield {name: arrays[name] for name in arrays.files}


def travel_time(distance, frequency):
    """Time [s] that waves of `frequency` [Hz] take over `distance` [m] of deep water."""
    return distance / float(group_velocity(2 * np.pi * frequency))


def correlation(predicted, elevation, dt, distance):
    """Correlation of a predicted envelope and a true elevation over the covered core."""
    first = travel_time(distance, CORE[1] / PEAK_PERIOD)
    last = RECORD_PERIODS * PEAK_PERIOD + travel_time(distance, CORE[0] / PEAK_PERIOD)
    times = dt * np.arange(elevation.size)
    core = (times >= first) & (times <= last)
    # fine enough that the interpolation between its points costs nothing
    forecast, step = elevation_of(predicted, refine=8)
    at = np.interp(times[core], predicted.start + step * np.arange(forecast.size), forecast)
    return np.corrcoef(at, elevation[core])[0, 1]


def coefficients(envelope, omega, first, last):
    """Fourier coefficients of free waves at `omega` under a Hann window from first to last."""
    times = envelope.times
    inside = (times >= first) & (times <= last)
    t = times[inside]
    window = np.sin(np.pi * (t - first) / (last - first)) ** 2
    phases = np.exp(1j * np.multiply.outer(omega - envelope.omega0, t))
    return phases @ (window * envelope.values[inside]) * envelope.dt


def in_phase(predicted, truth, distance, omega0):
    """(3, bands): Re T conj(P), |P|^2 and |T|^2, means over the frequencies of each band."""
    sums = np.zeros((3, BANDS.size - 1))
    for i, (low, high) in enumerate(pairwise(BANDS)):
        first = travel_time(distance, high * omega0 / (2 * np.pi))
        last = RECORD_PERIODS * PEAK_PERIOD + travel_time(distance, low * omega0 / (2 * np.pi))
        count = int((high - low) * omega0 * (last - first) / (2 * np.pi))
        omega = omega0 * np.linspace(low, high, 2 * count + 1)[1::2]
        p, t = (coefficients(e, omega, first, last) for e in (predicted, truth))
        sums[:, i] = np.mean([(t * p.conj()).real, np.abs(p) ** 2, np.abs(t) ** 2], axis=1)
    return sums


def measure(member, sensors):
    """One sea: steepness, mean correlations (predictions, distances), in-phase sums."""
    elevation, dt = member["elevation"].astype(float), float(member["dt"])
    spacing = float(member["gauge_spacing"])
    gauges = len(elevation)
    hops = [round(d * WAVELENGTH / spacing) for d in DISTANCES]
    reach = spacing * np.array(hops)
    samples = round(RECORD_PERIODS * PEAK_PERIOD / dt)
    truths = {}
    correlations, cells = [], []
    for sensor in np.arange(sensors) * gauges // sensors:
        record = elevation[sensor, :samples] - elevation[sensor, :samples].mean()
        sea = sea_state(record, dt)
        envelope = free_envelope(record, dt, omega0=2 * np.pi / sea.tp, margin=MARGIN)
        runs = {name: ForwardRun(envelope, equation=name) for name in EQUATIONS}
        downwave = {name: run.march(reach) for name, run in runs.items()}
        pair = runs["dysthe-pair"]
        downwave["expected"] = [pair.expected(e, sea.steepness) for e in downwave["dysthe-pair"]]
        rows = np.empty((len(PREDICTIONS), len(DISTANCES)))
        for j, (hop, distance) in enumerate(zip(hops, reach, strict=True)):
            gauge = (sensor + hop) % gauges
            for i, name in enumerate(PREDICTIONS):
                rows[i, j] = correlation(downwave[name][j], elevation[gauge], dt, distance)
            if gauge not in truths:
                truths[gauge] = free_envelope(elevation[gauge], dt, omega0=envelope.omega0)
            sums = in_phase(downwave["dysthe-pair"][j], truths[gauge], distance, envelope.omega0)
            cells.append((sea.steepness, distance * envelope.k0, *(sums / sea.hs**2)))
        correlations.append(rows)
    return float(member["steepness"]), np.mean(correlations, axis=0), cells


def print_correlations(steepness, correlations):
    """The first table."""
    print("\nCorrelation of predicted and true elevation at 2.5 / 5 / 10 / 20 peak wavelengths")
    print(
        f"{'steepness':14s}" + "".join(f"{low:.2f}-{high:.2f}".ljust(24) for low, high in CLASSES)
    )
    classes = [(steepness >= low) & (steepness < high) for low, high in CLASSES]
    print(f"{'seas':14s}" + "".join(f"{inside.sum()}".ljust(24) for inside in classes))
    largest_error = 0.0
    for i, name in enumerate(PREDICTIONS):
        line = f"{name:14s}"
        for inside in classes:
            if inside.sum() < 2:
                line += "-".ljust(24)
                continue
            values = correlations[inside, i]
            line += " ".join(f"{v:.3f}" for v in values.mean(axis=0)).ljust(24)
            error = values.std(axis=0, ddof=1).max() / np.sqrt(inside.sum())
            if name in ("dysthe-pair", "expected"):
                largest_error = max(largest_error, error)
        print(line.rstrip())
    print(f"largest standard error of the last two rows, by sea: {largest_error:.3f}")


def print_coherence(steepness, cells):
    """The second table and the fit of `PHASE_LOSS`."""
    centres = 0.5 * (BANDS[1:] + BANDS[:-1]) - 1
    shown = slice(1, None, 2)
    print("\nShare in phase, measured (m) and phase_coherence (c), by O = omega/omega0 - 1")
    print(
        f"{'steepness':11s}{'wavelengths':>12s}   " + "".join(f"{o:8.2f}" for o in centres[shown])
    )
    for low, high in CLASSES:
        inside = [row for value, row in zip(steepness, cells, strict=True) if low <= value < high]
        if not inside:
            continue
        for j, wavelengths in enumerate(DISTANCES):
            group = [cell for row in inside for cell in row[j :: len(DISTANCES)]]
            cross = np.sum([cell[2] for cell in group], axis=0)
            power = np.sum([cell[3] for cell in group], axis=0)
            model = sum(cell[3] * phase_coherence(centres, cell[1], cell[0]) for cell in group)
            label = f"{low:.2f}-{high:.2f}  {wavelengths:11.1f}"
            print(f"{label} m " + "".join(f"{v:8.2f}" for v in (cross / power)[shown]))
            print(f"{'':{len(label)}} c " + "".join(f"{v:8.2f}" for v in (model / power)[shown]))

    flat = [cell for row in cells for cell in row]
    s, d = (np.array([cell[i] for cell in flat])[:, None] for i in (0, 1))
    cross, power, true_power = (np.array([cell[i] for cell in flat]) for i in (2, 3, 4))
    log_unit = np.log(phase_coherence(centres, d, s)) / propagate.PHASE_LOSS

    def unexplained(constant):
        # sum |T - c P|^2 / sum |T|^2
        factor = np.exp(constant * log_unit)
        return float((power * factor**2 - 2 * cross * factor + true_power).sum()) / true_power.sum()

    fit = minimize_scalar(unexplained, bounds=(0.0, 200.0), method="bounded").x
    print(f"\nPHASE_LOSS in the package {propagate.PHASE_LOSS:g}, least squares {fit:.1f}")
    print(
        f"unexplained energy of the true free waves: {unexplained(0.0):.4f} undamped, "
        f"{unexplained(propagate.PHASE_LOSS):.4f} in the package, {unexplained(fit):.4f} fitted"
    )


def main():
    """Run the benchmark from the command line."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--seas", type=int, default=24, help="how many seas (default 24)")
    parser.add_argument("--folder", help="folder of shards; without it seas are simulated")
    parser.add_argument("--sensors", type=int, default=4, help="sensor gauges a sea (default 4)")
    options = parser.parse_args()
    began = time.perf_counter()
    lowest, highest = CLASSES[0][0], CLASSES[-1][1]
    results = [
        measure(member, options.sensors)
        for member in members(options.folder, options.seas)
        if lowest <= member["steepness"] < highest
    ]
    if not results:
        raise SystemExit(f"no sea of steepness {lowest:g} to {highest:g}")
    steepness = np.array([result[0] for result in results])
    print(f"{len(results)} seas, {options.sensors} sensors a sea")
    print_correlations(steepness, np.array([result[1] for result in results]))
    print_coherence(steepness, [result[2] for result in results])
    print(f"{time.perf_counter() - began:.0f} s")


if __name__ == "__main__":
    main()
