"""Data types as figures; nothing is computed here.

Figures are made with the `matplotlib.figure.Figure` class alone, so no global state is touched
and no display is needed.

>>> image_bytes(Figure(), "svg")[:5]
b'<?xml'
"""

from __future__ import annotations

import io

import matplotlib as mpl
import numpy as np
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter

from forecaster.datatypes import Forecast, Record, SeaState
from forecaster.errors import InputError
from forecaster.waves.heights import zero_crossing_waves
from forecaster.waves.scattering_spectrum import DRIFT_DISTANCE, ScatteringSpectrum
from forecaster.wording import figure_notes, one_in, percent

FORMATS = ("png", "svg", "pdf")
# Told apart with every common kind of colour vision: Okabe & Ito 2008, Color Universal Design.
FORECAST, BASE, THRESHOLD, SEA = "#0072B2", "#222222", "#D55E00", "#4d4d4d"
LARGEST_WAVES = 3
NUMBERED = 8  # eigenvalues
_RESOLUTION = 150  # dots per inch
_LEAST_SURFACE = 1e-3  # m, of the axis of elevation
_LOWEST = 1e-5  # of the axis of probabilities


def forecast_figure(forecast: Forecast) -> Figure:
    """The record, the probability in each interval, and the probability of every height.

    Parameters
    ----------
    forecast : Forecast
        Where no forecast could be given, the base rate alone is drawn; where the quality
        failed, the record alone.
    """
    if forecast.target is None:
        figure = Figure(figsize=(11, 3.8), layout="constrained")
        _draw_record(figure.subplots(), forecast)
    else:
        figure = Figure(figsize=(11, 8.2), layout="constrained")
        grid = figure.add_gridspec(3, 2, height_ratios=(1, 1.35, 0.3), width_ratios=(1.25, 1))
        _draw_record(figure.add_subplot(grid[0, :]), forecast)
        bars = figure.add_subplot(grid[1, 0])
        _draw_intervals(bars, forecast)
        _draw_coverage(figure.add_subplot(grid[2, 0], sharex=bars), forecast)
        bars.tick_params(labelbottom=False)
        _draw_exceedance(figure.add_subplot(grid[1:, 1]), forecast)
    # a file name may hold "$", which would otherwise be read as mathematics
    head, foot = figure_notes(forecast)
    figure.suptitle(
        f"{_title(forecast)}\n{head}".strip(), parse_math=False, ha="left", x=0.01, fontsize=11
    )
    figure.supxlabel(foot, parse_math=False, ha="left", x=0.01, fontsize=6.5)
    return figure


def scattering_figure(record: Record, sea: SeaState, spectrum: ScatteringSpectrum) -> Figure:
    """The record with its envelope and groups, and its eigenvalues by height and group speed.

    The highest eigenvalues are numbered, and bear the same number where they live in the record.
    """
    figure = Figure(figsize=(11, 7.6), layout="constrained")
    above, below = figure.subplots(2, 1, height_ratios=(1, 1.25))
    _draw_groups(above, record, spectrum)
    _draw_eigenvalues(below, sea, spectrum)
    told = "no group of waves would keep together by itself"
    if spectrum.eigenvalues:
        largest = spectrum.eigenvalues[0]
        told = (
            f"largest group that would keep together by itself: {largest.height:.1f} m "
            f"({largest.height_ratio:.1f} Hs)"
        )
    figure.suptitle(
        f"{_plain_name(record)}: {told}", parse_math=False, ha="left", x=0.01, fontsize=13
    )
    return figure


def _draw_groups(axes, record: Record, spectrum: ScatteringSpectrum) -> None:
    envelope, end = spectrum.envelope, record.end
    axes.plot((record.times - end) / 60, record.elevation, color=SEA, lw=0.6)
    inside = (envelope.times >= record.start) & (envelope.times <= end)
    times, height = (envelope.times[inside] - end) / 60, np.abs(envelope.values[inside])
    axes.plot(times, height, color=FORECAST, lw=1.4)
    for group in spectrum.groups:
        axes.axvspan(
            (group.start - end) / 60, (group.end - end) / 60, color=FORECAST, alpha=0.12,
            lw=1.5, ec="white",
        )  # fmt: skip
    top = 1.15 * height.max()
    for number, item in enumerate(spectrum.eigenvalues[:NUMBERED], start=1):
        axes.text(
            (item.time - end) / 60, top, str(number), color=THRESHOLD, fontweight="bold",
            ha="center", va="bottom",
        )  # fmt: skip
    axes.set_ylim(top=1.35 * height.max())
    axes.set_xlim((record.start - end) / 60, 0)
    axes.set_title(
        "The waves at the sensor, their envelope (blue) and the wave groups (shaded); "
        "numbers: see below",
        fontsize=10, loc="left",
    )  # fmt: skip
    axes.set_xlabel("minutes, counted from the end of the record")
    axes.set_ylabel("surface [m]")


def _draw_eigenvalues(axes, sea: SeaState, spectrum: ScatteringSpectrum) -> None:
    items = spectrum.eigenvalues
    axes.set_title(
        f"{len(items)} eigenvalues, each a group that would keep together, alone on the water: "
        f"{100 * spectrum.discrete_share:.0f} % of the wave energy; "
        f"{100 * spectrum.continuous_share:.0f} % is in waves that disperse",
        fontsize=10, loc="left",
    )  # fmt: skip
    axes.set_xlabel(
        f"group speed against that of the main waves, {spectrum.carrier_speed:.1f} m/s [%]"
    )
    axes.set_ylabel("height, crest to trough\n[significant wave heights, Hs]")
    axes.axvline(0, color="#bbbbbb", lw=0.8, zorder=0)
    if not items:
        _say(axes, "no group of waves would keep together")
        return
    offsets = [100 * item.speed_offset for item in items]
    axes.vlines(offsets, 0, [item.height_ratio for item in items], color=FORECAST, lw=1, alpha=0.4)
    axes.plot(
        offsets, [item.height_ratio for item in items], "o", color=FORECAST, ms=6, mec="white"
    )
    for number, item in enumerate(items[:NUMBERED], start=1):
        axes.annotate(
            f"{number}: {item.height:.1f} m" if number <= 3 else str(number),
            (100 * item.speed_offset, item.height_ratio), xytext=(6, 3),
            textcoords="offset points", color=THRESHOLD, fontweight="bold", fontsize=9,
        )  # fmt: skip
    axes.axhspan(0, spectrum.drift, color="#999999", alpha=0.5, lw=0, zorder=0)
    notes = (
        (0.01, "left", "slower: shorter waves"),
        (0.99, "right", "faster: longer waves"),
    )
    for place, side, text in notes:
        axes.text(place, 0.97, text, transform=axes.transAxes, ha=side, va="top", fontsize=9)
    axes.text(
        0.99, 0.89,
        f"grey band, {100 * spectrum.drift:.0f} % of Hs:\nby so much heights drift\n"
        f"over {DRIFT_DISTANCE} wavelengths",
        transform=axes.transAxes, ha="right", va="top", fontsize=9, color=SEA,
    )  # fmt: skip
    axes.set_ylim(0, 1.15 * items[0].height_ratio)
    metres = axes.secondary_yaxis("right", functions=(lambda x: x * sea.hs, lambda x: x / sea.hs))
    metres.set_ylabel("the same [m]")


def image_bytes(figure: Figure, form: str) -> bytes:
    """A figure as the content of a file; equal figures give equal bytes.

    Parameters
    ----------
    figure : Figure
    form : str
        One of `FORMATS`.

    Raises
    ------
    InputError
        For another format.
    """
    if form not in FORMATS:
        raise InputError(f"a figure is written as one of {', '.join(FORMATS)}, got {form!r}")
    undated = {
        "png": {"Software": None},
        "svg": dict.fromkeys(("Date", "Creator", "Format", "Type")),
        "pdf": dict.fromkeys(("CreationDate", "Creator", "Producer")),
    }[form]
    stream = io.BytesIO()
    with mpl.rc_context({"svg.hashsalt": "trikymia"}):
        figure.savefig(stream, format=form, dpi=_RESOLUTION, metadata=undated)
    return stream.getvalue()


def inline_svg(figure: Figure) -> str:
    """A figure as an ``<svg>`` element to stand inside a page: it loads nothing from elsewhere."""
    text = image_bytes(figure, "svg").decode("utf-8")
    return text[text.index("<svg") :]


def _title(forecast: Forecast) -> str:
    name = _plain_name(forecast.record)
    if not forecast.answered:
        return f"{name}: no forecast"
    chance = f"{percent(forecast.probability)} ({one_in(forecast.probability)})"
    target = forecast.target
    where = "at the sensor" if target.distance == 0 else f"{target.distance:.0f} m downwave"
    noun = "crest" if target.criterion == "crest" else "wave"
    minutes = (target.valid_to - target.valid_from) / 60
    return (
        f"{name}: {chance} for a {noun} of {target.threshold_m:.1f} m or more {where}, "
        f"within {minutes:.0f} min"
    )


def _plain_name(record: Record) -> str:
    name = record.source.rsplit("/", 1)[-1]
    return name.encode("ascii", "backslashreplace").decode("ascii")


def _draw_record(axes, forecast: Forecast) -> None:
    record = forecast.record
    axes.plot((record.times - record.end) / 60, record.elevation, color=SEA, lw=0.7)
    axes.axhline(0, color="#bbbbbb", lw=0.6, zorder=0)
    axes.axvline(0, color=THRESHOLD, lw=1.5)
    waves = zero_crossing_waves(record.elevation, record.dt, start=record.start)
    for rank, i in enumerate(np.argsort(-waves.height)[:LARGEST_WAVES]):
        span = (np.array([waves.start[i], waves.end[i]]) - record.end) / 60
        axes.axvspan(*span, color=FORECAST, alpha=0.25, lw=0)
        axes.annotate(
            f"{waves.height[i]:.1f} m",
            ((waves.crest_time[i] - record.end) / 60, waves.crest[i]),
            xytext=(0, 3), textcoords="offset points", ha="center", va="bottom",
            color=FORECAST, fontsize=9, fontweight="bold" if rank == 0 else "normal",
        )  # fmt: skip
    axes.margins(x=0.01, y=0.18)
    if not np.nanmax(np.abs(record.elevation), initial=0.0) > _LEAST_SURFACE:
        axes.set_ylim(-_LEAST_SURFACE, _LEAST_SURFACE)  # rounding is not to look like waves
    sea = "" if forecast.sea_state is None else (
        f": significant height {forecast.sea_state.hs:.1f} m, "
        f"peak period {forecast.sea_state.tp:.1f} s"
    )  # fmt: skip
    axes.set_title(f"The waves at the sensor{sea}; largest waves in blue", fontsize=10, loc="left")
    axes.set_xlabel("minutes, counted from the end of the record (orange line: issue time)")
    axes.set_ylabel("surface [m]")


def _draw_intervals(axes, forecast: Forecast) -> None:
    axes.set_title("When: probability in each interval at the target", fontsize=10, loc="left")
    axes.set_ylabel("probability")
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{100 * value:.3g} %"))
    if not forecast.intervals:
        _say(axes, "no interval is forecast")
        return
    edges = _edges(forecast)
    scored = [item.probability for item in forecast.intervals]
    if None in scored:
        _say(axes, "no forecast: base rate only")
    else:
        axes.bar(
            edges[:-1], scored, np.diff(edges), align="edge", color=FORECAST, alpha=0.6,
            edgecolor="white", lw=0.5, label="forecast",
        )  # fmt: skip
    rates = [item.base_rate for item in forecast.intervals]
    if None not in rates:
        axes.stairs(
            rates, edges, baseline=None, color=BASE, lw=1.6, ls="--",
            label="ordinary sea of this height (base rate)",
        )  # fmt: skip
    top = max((value for value in (*scored, *rates) if value is not None), default=1.0)
    axes.set_ylim(0, 1.25 * top or 1.0)
    axes.set_xlim(edges[0], edges[-1])
    axes.legend(loc="upper right", frameon=False, fontsize=9)


def _draw_coverage(axes, forecast: Forecast) -> None:
    axes.set_xlabel("minutes after the end of the record, at the target")
    axes.set_ylabel("waves\nknown", fontsize=9)
    axes.set_ylim(0, 1)
    axes.set_yticks((0, 1), ("none", "all"), fontsize=8)
    if forecast.intervals:
        axes.stairs(
            [item.coverage for item in forecast.intervals], _edges(forecast),
            color="#009E73", fill=True, alpha=0.6,
        )  # fmt: skip


def _edges(forecast: Forecast) -> np.ndarray:
    """(m + 1,) edges of the intervals, minutes after the issue time."""
    ends = [forecast.intervals[0].start, *(item.end for item in forecast.intervals)]
    return (np.array(ends) - forecast.record.end) / 60


def _draw_exceedance(axes, forecast: Forecast) -> None:
    axes.set_title("How high: largest wave of the whole period", fontsize=10, loc="left")
    if not forecast.exceedance:
        _say(axes, "no heights are forecast")
        return
    target, rows = forecast.target, forecast.exceedance
    heights = [row.height for row in rows]
    handles = []
    for name, label, style in (
        ("base_rate", "ordinary sea (base rate)", {"color": BASE, "lw": 1.6, "ls": "--"}),
        ("probability", "forecast", {"color": FORECAST, "lw": 2.2}),
    ):
        values = [getattr(row, name) for row in rows]
        if None not in values:
            handles += axes.plot(heights, np.maximum(values, _LOWEST / 10), label=label, **style)
    axes.axvline(target.threshold_m, color=THRESHOLD, lw=1.2)
    handles.append(
        Line2D([], [], color=THRESHOLD, lw=1.2, label=f"asked: {target.threshold_m:.1f} m")
    )
    if forecast.probability is not None and forecast.probability_90 is not None:
        low, high = (max(value, _LOWEST) for value in forecast.probability_90)
        axes.plot([target.threshold_m] * 2, [low, high], color=FORECAST, lw=5, alpha=0.45)
        handles += axes.plot(
            target.threshold_m, max(forecast.probability, _LOWEST), "o", color=FORECAST, ms=8,
            mec="white", label="this answer, bar: 90 % interval",
        )  # fmt: skip
    axes.set_yscale("log")
    axes.set_ylim(_floor(forecast), 1.5)
    axes.yaxis.set_major_formatter(FuncFormatter(_tick))
    axes.grid(True, which="major", color="#e4e4e4", lw=0.6)
    axes.set_axisbelow(True)
    noun = "crest above mean level" if target.criterion == "crest" else "wave height"
    axes.set_xlabel(f"largest {noun} reaches this many metres")
    axes.set_ylabel("probability")
    if target.threshold > 0:
        hs = target.threshold_m / target.threshold
        above = axes.secondary_xaxis("top", functions=(lambda x: x / hs, lambda x: x * hs))
        above.set_xlabel("the same, in significant wave heights (Hs)", fontsize=9)
        above.tick_params(labelsize=8)
    axes.legend(handles=handles, loc="lower left", frameon=True, framealpha=0.9, fontsize=9)


def _floor(forecast: Forecast) -> float:
    """Lower end of the axis of probabilities: a decade below what is asked, at most 0.1 %."""
    shown = [forecast.base_rate, forecast.probability, *(forecast.probability_90 or ())]
    smallest = min((value for value in shown if value is not None), default=1e-2)
    return max(min(smallest / 10, 1e-3), _LOWEST)


def _tick(value: float, _) -> str:
    return f"{100 * value:g} %\n{one_in(value)}" if value < 0.5 else f"{100 * value:g} %"


def _say(axes, text: str) -> None:
    axes.text(0.5, 0.5, text, transform=axes.transAxes, ha="center", va="center", color=BASE)
