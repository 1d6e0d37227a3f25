"""Write the two demo records from the seas of demo-hos.toml.

    trikymia synth data_synth/demo-hos.toml ensembles/demo
    python data_synth/make_demo.py ensembles/demo

A wave staff stands 1500 m upwave of the work site.  The seas, computed at a peak period of 10 s,
are scaled (Froude) so that five gauge spacings are 1500 m.  The developing record is the one with
the highest wave at the site in the minutes after the record ends, in units of Hs, whose own
largest wave is below 1.9 Hs; the quiet one has the lowest.
"""

import sys
from pathlib import Path

import numpy as np

from forecaster.learning.ensemble import PEAK_PERIOD, plan_hash
from forecaster.settings import SeaRecipe, load_settings
from forecaster.storage import ShardFolder, write_atomically
from forecaster.waves.heights import interval_maxima, zero_crossing_waves

HERE = Path(__file__).parent
DISTANCE = 1500.0  # m
SPACINGS = 5  # gauges from the staff to the site
RATE = 2.0  # Hz of the written record
NOISE = 0.01  # m


def main(folder):
    recipe = load_settings(HERE / "demo-hos.toml", SeaRecipe)
    seas = ShardFolder(Path(folder) / "seas", plan_hash=plan_hash(recipe))
    found = []
    for member in range(recipe.members):
        sea = seas.read(member)
        scale = DISTANCE / (SPACINGS * float(sea["gauge_spacing"]))
        dt = float(sea["dt"]) * np.sqrt(scale)
        elevation = sea["elevation"].astype(float) * scale
        tp = PEAK_PERIOD * np.sqrt(scale)
        n = round(recipe.views.record_periods[0] * recipe.samples_per_period)
        for gauge in range(0, recipe.gauges, 6):
            record = elevation[gauge, :n]
            hs = 4 * record.std()
            there = elevation[(gauge + SPACINGS) % recipe.gauges]
            # what the record tells of: waves that left before its end
            edges = (n - 1) * dt + tp * np.array([1.0, 21.0])
            ahead = float(interval_maxima(there, dt, edges)[0][0] / hs)
            own = zero_crossing_waves(record, dt).height.max() / hs
            found.append((ahead, own, member, elevation[gauge], n, dt))
    developing = max((f for f in found if f[1] < 1.9), key=lambda f: f[0])
    quiet = min(found, key=lambda f: f[0])
    for name, chosen in (("developing", developing), ("quiet", quiet)):
        ahead, own, member, series, n, dt = chosen
        times = np.arange(0, (n - 1) * dt, 1 / RATE)
        # band-limited interpolation of the whole series, whose end is far from the record's
        fine = np.fft.irfft(np.fft.rfft(series), 8 * series.size) * 8
        values = np.interp(times, dt / 8 * np.arange(fine.size), fine)
        values += NOISE * np.random.default_rng(member).standard_normal(values.size)
        rows = "".join(f"{t:.1f},{v:.3f}\n" for t, v in zip(times, values, strict=True))
        path = HERE / f"skerry-upwave-{name}.csv"
        head = "# Skerry Deep (invented), wave staff 1500 m upwave of the work site\n"
        write_atomically(path, (head + "time_s,elevation_m\n" + rows).encode())
        print(
            f"{path.name}: sea {member}; largest wave {own:.2f} Hs in the record, "
            f"{ahead:.2f} Hs at the site afterwards"
        )


if __name__ == "__main__":
    main(*sys.argv[1:])
