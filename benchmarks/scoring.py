"""How long one answer takes: the cold command, and a second call in one process, step by step.

python benchmarks/scoring.py
"""

import subprocess
import sys
import time
from pathlib import Path

import numpy as np

import forecaster
from forecaster.learning.events import interval_edges
from forecaster.learning.features import FEATURES, Scene, feature_table, look_ahead
from forecaster.learning.registry import load_model

RECORD = Path(__file__).parents[1] / "data_synth" / "skerry-upwave-developing.csv"
DISTANCE = 1500.0  # m
REPEATS = 7


def median_time(function, *arguments, **options) -> float:
    """Median time [s] of some calls, the first left out."""
    spent = []
    for _ in range(REPEATS + 1):
        begin = time.perf_counter()
        function(*arguments, **options)
        spent.append(time.perf_counter() - begin)
    return float(np.median(spent[1:]))


def main() -> None:
    """Print the table."""
    command = [sys.executable, "-m", "forecaster", "score", str(RECORD), "--distance", "1500"]
    cold = median_time(subprocess.run, command, check=True, stdout=subprocess.DEVNULL)
    whole = median_time(forecaster.score, str(RECORD), distance=DISTANCE)
    record = forecaster.check(str(RECORD)).record
    ahead = look_ahead(record, [DISTANCE])
    scene = Scene(ahead, 0, interval_edges(record.end, ahead.sea.tp, 7))
    table = feature_table(scene)
    model = load_model()
    names = tuple(FEATURES)
    ratios = np.linspace(1.0, 2.8, 10)
    print(f"{'one answer, cold command':<40}{cold:8.3f} s")
    print(f"{'one answer, second call':<40}{whole:8.3f} s")
    steps = {
        "read, quality, sea state": median_time(forecaster.check, str(RECORD)),
        "envelope, runs, scattering": median_time(look_ahead, record, [DISTANCE]),
        "feature table": median_time(lambda: feature_table(Scene(ahead, 0, scene.edges))),
        "model, 7 intervals x 10 thresholds": median_time(model.intervals, table, names, ratios),
    }
    for label, spent in steps.items():
        print(f"  {label:<38}{spent:8.3f} s  {spent / whole:5.0%} of the second call")


if __name__ == "__main__":
    main()
