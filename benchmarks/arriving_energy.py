"""What the scattering spectrum says of the waves to come, with their phases left out.

    python benchmarks/arriving_energy.py [--seas N] [--folder FOLDER]

Each window of a record has its energy carried on at the speeds of its scattering spectrum
(`features.Scene.arriving_waves`).  Printed is the rank correlation of the height that arrives
with the largest height that came, over the intervals of which half was measured, by distance and
by steepness kp Hs/2, for both lengths of window.  Beside it stands what is left when the waves are
taken as linear: the same windows a thousand times smaller, of which the scattering spectrum is
the power spectrum.

Seas and FOLDER as of forward_run.py; eight sensors a sea.
"""

from __future__ import annotations

import argparse
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
from forward_run import CLASSES, RECORD_PERIODS, WAVELENGTH, members
from scipy.stats import spearmanr

from forecaster.datatypes import Record
from forecaster.learning.ensemble import PEAK_PERIOD
from forecaster.learning.events import (
    HORIZON_COVERAGE,
    INTERVAL_PERIODS,
    interval_edges,
    outcomes,
)
from forecaster.learning.features import FLUX_WINDOWS, Scene, first_look, scattering_content
from forecaster.waves.scattering import scaled_envelope, windowed_energy

DISTANCES = (2.5, 5.0, 10.0, 20.0, 30.0)
SENSORS = 8
COUNT = int(80 / INTERVAL_PERIODS)
SMALL = 1e-3


def linear(content):
    """The same content, had the waves been linear."""
    q, step = scaled_envelope(content.envelope)
    flux = {
        name: replace(
            found,
            energy=windowed_energy(
                SMALL * q, step, found.centre, half_width=np.pi * FLUX_WINDOWS[name][0]
            ).energy
            / SMALL**2,
        )
        for name, found in content.flux.items()
    }
    return replace(content, flux=flux)


def intervals(sea):
    """Yield (steepness, distance, heights to come, arriving heights) of each record of a sea."""
    elevation, dt = sea["elevation"].astype(float), float(sea["dt"])
    gauges = elevation.shape[0]
    length = round(RECORD_PERIODS * PEAK_PERIOD / dt)
    for gauge in range(0, gauges, gauges // SENSORS):
        values = elevation[gauge, :length]
        first = first_look(Record(values - values.mean(), dt), np.array(DISTANCES) * WAVELENGTH)
        edges = interval_edges(first.record.end, first.sea.tp, COUNT)
        content = scattering_content(first.record, first.sea)
        for index, distance in enumerate(DISTANCES):
            truth = elevation[(gauge + round(distance / 2.5)) % gauges]
            heights, _ = outcomes(truth, dt, edges)
            arriving = []
            for of in (content, linear(content)):
                ahead = SimpleNamespace(
                    record=first.record, sea=first.sea, spectrum=first.spectrum,
                    distances=first.distances, content=of,
                )  # fmt: skip
                scene = Scene(ahead, index, edges)
                arriving += [scene.largest_arriving(window) for window in FLUX_WINDOWS]
            kept = np.isfinite(heights) & (scene.coverage() >= HORIZON_COVERAGE)
            yield (
                float(sea["steepness"]),
                distance,
                heights[kept] / first.sea.hs,
                [column[kept] for column in arriving],
            )


def main():
    parser = argparse.ArgumentParser(description="see the head of this file")
    parser.add_argument("--seas", type=int, default=12)
    parser.add_argument("--folder")
    options = parser.parse_args()
    found = {}
    for sea in members(options.folder, options.seas):
        for steepness, distance, heights, arriving in intervals(sea):
            found.setdefault((steepness, distance), []).append(np.vstack([heights, *arriving]))
    head = "".join(f"{name:>9s}" for name in FLUX_WINDOWS)
    print("rank correlation of the arriving height with the largest height of the interval")
    print(f"steepness   wavelengths  intervals   scattering:{head}   linear:{head}")
    for low, high in (*CLASSES, (CLASSES[0][0], CLASSES[-1][1])):
        for distance in DISTANCES:
            parts = [
                part
                for (steepness, at), several in found.items()
                if at == distance and low <= steepness <= high
                for part in several
            ]
            if not parts:
                continue
            heights, *columns = np.hstack(parts)
            values = [spearmanr(column, heights)[0] for column in columns]
            text = [f"{value:9.3f}" for value in values]
            print(
                f"{low:.2f}-{high:.2f}   {distance:11g}  {heights.size:9d}              "
                f"{''.join(text[:2])}          {''.join(text[2:])}"
            )


if __name__ == "__main__":
    main()
