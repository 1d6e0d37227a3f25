"""From simulated seas to rows that teach: sensor records, features, outcomes.

A view is one record of one sea as one sensor would deliver it (place, time, length, noise,
sampling, quantisation, gaps).  Its features come from the same code that scores; its outcomes
are the noise-free waves at the target.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass, fields
from functools import partial
from pathlib import Path

import numpy as np

from forecaster.datatypes import Record
from forecaster.errors import InputError, NumericsError
from forecaster.learning.ensemble import PEAK_PERIOD, generate, member_generator
from forecaster.learning.events import INTERVAL_PERIODS, interval_edges, outcomes
from forecaster.learning.features import FEATURES, Scene, carried, feature_table, look_ahead
from forecaster.records.read import bridge_gaps
from forecaster.settings import SeaRecipe, settings_to_table
from forecaster.storage import ShardFolder, sha256_of

VIEWS = 1  # purpose of the random numbers that draw views (see `member_generator`)
NAMES = tuple(FEATURES)
PLAIN_FEATURES = (  # computed of a plain Dysthe run too
    "run_height", "run_crest", "run_envelope", "run_height_wide", "run_crest_wide",
    "run_height_before", "run_height_after",
)  # fmt: skip
PLAIN_NAMES = tuple(name.replace("run_", "plain_", 1) for name in PLAIN_FEATURES)
PLAIN_RECORDS = 2  # records of a taught sea for which the plain Dysthe run is computed too
FEATURES_EDITION = 2  # raised when a feature's or a view's numbers change: rows are then rebuilt


@dataclass(frozen=True, slots=True, eq=False)
class Dataset:
    """Rows of features and outcomes, one per (record, distance, interval).

    Parameters
    ----------
    features : (n, len(names)) float32 array
    height, crest : (n,) float32 arrays
        Largest wave height and crest in the interval over Hs of the record.
    sea, record : (n,) int32 arrays
        Which sea and which record a row belongs to; splits are by sea.
    true_steepness : (n,) float32 array
        Of the sea as drawn: to sort results by, never a feature.
    distance : (n,) float32 array
        In peak wavelengths of the sea as drawn: to sort results by, never a feature.
    plain_run : (n, len(PLAIN_NAMES)) float32 array
        `PLAIN_FEATURES` of a plain Dysthe run, a baseline; NaN where not asked for.
    names : tuple of str
        Columns of `features`.
    """

    features: np.ndarray
    height: np.ndarray
    crest: np.ndarray
    sea: np.ndarray
    record: np.ndarray
    true_steepness: np.ndarray
    distance: np.ndarray
    plain_run: np.ndarray
    names: tuple[str, ...] = NAMES

    def column(self, name: str) -> np.ndarray:
        """(n,) one feature."""
        return self.features[:, self.names.index(name)]

    def rows(self, chosen) -> Dataset:
        """The rows that `chosen` (mask or indices) picks."""
        arrays = {name: getattr(self, name)[chosen] for name in _ARRAYS}
        return Dataset(names=self.names, **arrays)


_ARRAYS = tuple(item.name for item in fields(Dataset) if item.name != "names")


def joined(parts: list[Dataset]) -> Dataset:
    """One dataset of several; seas and records are renumbered so that none are confused."""
    if not parts:
        raise InputError("there is nothing to join: at least one dataset is needed")
    if any(part.names != parts[0].names for part in parts):
        raise InputError("datasets of different features cannot be joined")
    arrays = {name: [] for name in _ARRAYS}
    sea = record = 0
    for part in parts:
        for name, rows in arrays.items():
            shift = {"sea": sea, "record": record}.get(name, 0)
            rows.append(getattr(part, name) + np.int32(shift) if shift else getattr(part, name))
        sea += int(part.sea.max(initial=-1)) + 1
        record += int(part.record.max(initial=-1)) + 1
    joined_arrays = {name: np.concatenate(rows) for name, rows in arrays.items()}
    return Dataset(names=parts[0].names, **joined_arrays)


def take_record(elevation, dt, views, generator, *, after: float) -> tuple[Record, bool]:
    """One record of the elevation at a gauge, as one sensor would deliver it.

    Parameters
    ----------
    elevation : (n,) array [m]
    dt : float [s]
    views : forecaster.settings.SensorViews
    generator : numpy.random.Generator
    after : float [s]
        Time that must remain after the issue time.

    Returns
    -------
    record : Record
        Its clock is that of the simulation: sample 0 of `elevation` is time 0.
    clean : bool
        Whether it is free of noise.
    """
    lengths = np.log(views.record_periods)
    length = np.exp(generator.uniform(*lengths)) * PEAK_PERIOD
    clean = generator.uniform() < views.clean_share
    step = int(generator.integers(views.decimation[0], views.decimation[1] + 1))
    noise, quantum = generator.uniform(*views.noise), generator.uniform(*views.quantisation)
    first = generator.uniform(0, max(elevation.size * dt - after - length, 0.0))
    begin, count = round(first / dt), round(length / dt)
    if clean:
        step, noise, quantum = 1, 0.0, 0.0
    values = np.array(elevation[begin : begin + count : step], float)
    hs = 4 * values.std()
    values += noise * hs * generator.standard_normal(values.size)
    if quantum:
        values = np.round(values / (quantum * hs)) * (quantum * hs)
    record = Record(values - values.mean(), dt * step, start=begin * dt, source="simulated")
    if views.gap_share and not clean:
        record = _with_gaps(record, views.gap_share, generator)
    return record, clean


def _with_gaps(record, share, generator):
    values = np.array(record.elevation)
    longest = max(int(0.5 * PEAK_PERIOD / record.dt), 1)
    while np.isnan(values).mean() < share:
        size = int(generator.integers(1, longest + 1))
        place = int(generator.integers(1, values.size - size))
        values[place : place + size] = np.nan
    gappy = record.step("gaps made", elevation=values)
    return bridge_gaps(gappy, longest=0.25 * PEAK_PERIOD)


def member_rows(
    recipe: SeaRecipe, member: int, sea: dict, *, plain_records: int | None = 0
) -> Dataset:
    """All rows of one member.

    Parameters
    ----------
    recipe : SeaRecipe
    member : int
    sea : dict of arrays
        As `ensemble.simulate` returns.
    plain_records : int or None
        For how many of its records to compute the plain Dysthe run, a baseline; None for all.
    """
    generator = member_generator(recipe.root_seed, member, VIEWS)
    elevation, dt = sea["elevation"].astype(float), float(sea["dt"])
    spacing, closed = float(sea["gauge_spacing"]), bool(sea["closed"])
    steps = np.array(recipe.distances_wavelengths) / recipe.gauge_spacing_wavelengths
    steps = np.rint(steps).astype(int)
    stride = recipe.gauges // recipe.sensors
    after = recipe.after_periods * PEAK_PERIOD
    count = int(recipe.after_periods // INTERVAL_PERIODS)
    parts = [_no_rows()]
    for number in range(recipe.sensors * recipe.views.per_sensor):
        gauge = number // recipe.views.per_sensor * stride
        record, _ = take_record(elevation[gauge], dt, recipe.views, generator, after=after)
        reached = steps if closed else steps[gauge + steps < recipe.gauges]
        if reached.size == 0:
            continue
        try:
            ahead = look_ahead(record, reached * spacing)
            edges = interval_edges(record.end, ahead.sea.tp, count)
            compared = plain_records is None or number < plain_records
            plain = carried(ahead, equation="dysthe") if compared else None
        except (InputError, NumericsError):
            continue  # too coarse for its own waves, or a run that fails: not scored either
        for index, step in enumerate(reached):
            scene = Scene(ahead, index, edges)
            truth = elevation[(gauge + step) % recipe.gauges]
            heights, crests = outcomes(truth, dt, edges)
            known = np.isfinite(heights)
            shape = int(known.sum())
            plain_run = np.full((shape, len(PLAIN_NAMES)), np.nan, np.float32)
            if plain is not None:
                plain_run = feature_table(Scene(plain, index, edges), PLAIN_FEATURES)[known]
            parts.append(
                Dataset(
                    features=feature_table(scene)[known],
                    height=(heights[known] / ahead.sea.hs).astype(np.float32),
                    crest=(crests[known] / ahead.sea.hs).astype(np.float32),
                    sea=np.zeros(shape, np.int32),
                    record=np.full(shape, number, np.int32),
                    true_steepness=np.full(shape, sea["steepness"], np.float32),
                    distance=np.full(shape, recipe.distances_wavelengths[index], np.float32),
                    plain_run=plain_run,
                )
            )
    return Dataset(
        **{name: np.concatenate([getattr(part, name) for part in parts]) for name in _ARRAYS}
    )


def _no_rows() -> Dataset:
    """A dataset of no rows: what a member gives none of whose records can be used."""
    arrays = {name: np.empty(0, np.float32) for name in _ARRAYS}
    arrays["features"] = np.empty((0, len(NAMES)), np.float32)
    arrays["plain_run"] = np.empty((0, len(PLAIN_NAMES)), np.float32)
    return Dataset(**arrays | {name: np.empty(0, np.int32) for name in ("sea", "record")})


def rows_hash(recipe: SeaRecipe, plain_records: int | None) -> str:
    """Hash of what decides the rows of a recipe's members (not how many members there are)."""
    table = settings_to_table(recipe)
    del table["members"]
    return sha256_of(json.dumps([table, NAMES, FEATURES_EDITION, plain_records]).encode())


def build(
    recipe: SeaRecipe,
    folder,
    *,
    workers: int = 1,
    plain_records: int | None = PLAIN_RECORDS,
    progress: Callable[[str, int, int], None] = lambda step, done, total: None,
) -> Dataset:
    """Rows of all members of a recipe, simulating those seas that `folder` does not hold.

    Parameters
    ----------
    recipe : SeaRecipe
    folder : path
        ``folder/seas`` holds the seas (see `ensemble.generate`), ``folder/rows-...`` the rows;
        what is finished is not computed again.
    workers : int
        Processes.
    plain_records : int or None
        As in `member_rows`.
    progress : callable
        Called with (what is done, members done, members wanted).
    """
    import joblib

    folder = Path(folder)
    seas = generate(recipe, folder / "seas", workers=workers, progress=partial(progress, "seas"))
    edition = rows_hash(recipe, plain_records)
    shards = ShardFolder(folder / f"rows-{edition[:12]}", plan_hash=edition)
    finished = shards.finished()
    missing = [member for member in range(recipe.members) if member not in finished]
    progress("records", recipe.members - len(missing), recipe.members)
    with joblib.parallel_config(backend="loky", inner_max_num_threads=1):
        jobs = joblib.Parallel(n_jobs=workers, return_as="generator_unordered")(
            joblib.delayed(_rows_of_shard)(recipe, seas, shards, member, plain_records)
            for member in missing
        )
        for done, _ in enumerate(jobs, recipe.members - len(missing) + 1):
            progress("records", done, recipe.members)
    return joined([Dataset(**shards.read(member)) for member in range(recipe.members)])


def _rows_of_shard(recipe, seas, shards, member, plain_records):
    rows = member_rows(recipe, member, seas.read(member), plain_records=plain_records)
    shards.write(member, {name: getattr(rows, name) for name in _ARRAYS})
