"""Figures: they show the numbers they are given, in every case that can come."""

import re
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest
from matplotlib.figure import Figure

from forecaster import plots
from forecaster.datatypes import Target
from forecaster.errors import InputError
from forecaster.waves.heights import zero_crossing_waves
from forecaster.waves.scattering_spectrum import scattering_spectrum
from tests.hand_built import BAD, END, HS, SEA, forecast, record, unanswered


@pytest.fixture(scope="module")
def figure():
    return plots.forecast_figure(forecast())


def words(figure):
    """All texts of a figure."""
    figure.draw_without_rendering()
    return [item.get_text() for item in figure.findobj(lambda artist: hasattr(artist, "get_text"))]


def test_title_says_the_answer(figure):
    title = figure.get_suptitle()
    for part in ("skerry-upwave.csv", "4.2 %", "1 in 24", "8.4 m", "1500 m downwave", "7 min"):
        assert part in title


def test_a_figure_alone_says_what_limits_the_answer():
    made = forecast(issued_after=7200.0, quality=replace(BAD, verdict="suspect"))
    told = " ".join(" ".join(words(plots.forecast_figure(made))).split())
    for part in ("EXPIRED", "EDGE, with reserve", "SUSPECT record", "Issued 2031-05-01 05:04:10"):
        assert part in told
    for caveat in made.caveats:
        assert caveat in told


def test_a_dead_sensor_shows_a_line_and_not_its_rounding():
    flat = replace(record(), elevation=np.full(3600, 1e-17))
    axes = plots.forecast_figure(replace(unanswered(quality=BAD), record=flat)).axes[0]
    assert axes.get_ylim() == (-1e-3, 1e-3)


def test_axes_are_named_in_words_and_units(figure):
    for axes in figure.axes:
        assert axes.get_ylabel()
    labels = " ".join(axes.get_xlabel() for axes in figure.axes)
    assert "minutes" in labels and "metres" in labels


def test_record_and_its_largest_waves_are_drawn(figure):
    axes = figure.axes[0]
    made = record()
    line = axes.lines[0]
    assert np.array_equal(line.get_ydata(), made.elevation)
    # by hand: the last sample is the issue time, half a second is 1/120 min
    assert line.get_xdata()[-1] == 0 and line.get_xdata()[-2] == pytest.approx(-1 / 120)
    largest = zero_crossing_waves(made.elevation, made.dt).height.max()
    assert f"{largest:.1f} m" in [text.get_text() for text in axes.texts]
    assert len(axes.texts) == plots.LARGEST_WAVES


def test_bars_are_the_probabilities_of_the_intervals(figure):
    bars = figure.axes[1].patches
    heights = [bar.get_height() for bar in bars if hasattr(bar, "get_height")]
    assert heights == [item.probability for item in forecast().intervals]
    assert bars[4].get_x() == pytest.approx(160 / 60)  # by hand: 160 s after the issue time
    (rate,) = [artist for artist in bars if not hasattr(artist, "get_height")]
    assert set(rate.get_data().values) == {0.00076}


def test_coverage_is_drawn_below_the_bars(figure):
    (coverage,) = figure.axes[2].patches
    assert list(coverage.get_data().values) == [item.coverage for item in forecast().intervals]


def test_exceedance_holds_forecast_base_rate_and_the_answer_with_its_interval(figure):
    axes = figure.axes[3]
    rows = forecast().exceedance
    drawn = {line.get_label(): line for line in axes.lines}
    assert np.allclose(drawn["forecast"].get_ydata(), [row.probability for row in rows])
    assert np.allclose(drawn["forecast"].get_xdata(), [row.height for row in rows])
    base = drawn["ordinary sea (base rate)"].get_ydata()
    assert np.allclose(base, [max(row.base_rate, 1e-6) for row in rows])
    answer = drawn["this answer, bar: 90 % interval"]
    assert answer.get_xdata()[0] == 8.4 and answer.get_ydata()[0] == 0.042
    assert any(list(line.get_ydata()) == [0.021, 0.079] for line in axes.lines)


@pytest.mark.parametrize(
    "made",
    [
        unanswered(),
        unanswered(quality=BAD),
        forecast(calendar=False),
        forecast(probability=0.0, probability_90=(0.0, 0.0), base_rate=0.0),
        forecast(target=Target(0.0, 0.0, END, END + 1800, "crest", 1.25, 1.25 * HS)),
        forecast(intervals=(), exceedance=()),
    ],
)
def test_every_kind_of_answer_can_be_drawn(made):
    drawn = plots.forecast_figure(made)
    assert len(drawn.axes) == (1 if made.target is None else 4)
    assert "None" not in " ".join(words(drawn)) and "nan" not in " ".join(words(drawn))


def test_no_forecast_is_said_and_only_the_base_rate_is_drawn():
    drawn = plots.forecast_figure(unanswered())
    title = drawn.get_suptitle()
    assert title.splitlines()[0].endswith("no forecast")
    assert "steepness 0.21 above 0.14" in title
    assert "no forecast: base rate only" in words(drawn)
    assert "forecast" not in {line.get_label() for line in drawn.axes[3].lines}


def test_a_record_with_a_gap_and_a_strange_name_is_drawn():
    made = forecast(source="/data/$x^2_{$ \u00f8\u6ce2.csv")
    values = made.record.elevation.copy()
    values[500:600] = np.nan
    made = replace(made, record=replace(made.record, elevation=values))
    assert plots.image_bytes(plots.forecast_figure(made), "png").startswith(b"\x89PNG")


@pytest.mark.parametrize(
    ("form", "start"), [("png", b"\x89PNG"), ("svg", b"<?x"), ("pdf", b"%PDF")]
)
def test_images_are_of_their_format_and_equal_for_equal_figures(form, start):
    first, second = (plots.image_bytes(_small(), form) for _ in range(2))
    assert first.startswith(start)
    assert first == second


@pytest.fixture(scope="module")
def spectrum():
    return scattering_spectrum(record(), SEA)


def test_eigenvalues_are_drawn_by_height_and_group_speed(spectrum):
    drawn = plots.scattering_figure(record(), SEA, spectrum)
    above, below = drawn.axes
    points = next(line for line in below.lines if line.get_marker() == "o")
    np.testing.assert_allclose(
        np.column_stack([points.get_xdata(), points.get_ydata()]),
        [(100 * item.speed_offset, item.height / HS) for item in spectrum.eigenvalues],
    )
    numbers = {text.get_text(): text.get_position()[0] for text in above.texts}
    assert len(numbers) == plots.NUMBERED
    assert numbers["1"] == pytest.approx((spectrum.eigenvalues[0].time - END) / 60)
    assert len(above.patches) == len(spectrum.groups)
    told = " ".join(words(drawn))
    for text in ("group speed", "Hs", "m/s", "minutes", "surface [m]", "faster", "20 wavelengths"):
        assert text in told
    assert f"{spectrum.eigenvalues[0].height:.1f} m" in told


def test_a_record_without_eigenvalues_is_drawn(spectrum):
    empty = replace(spectrum, eigenvalues=(), groups=())
    drawn = plots.scattering_figure(record(source="a$b_{.csv"), SEA, empty)
    assert "no group of waves would keep together" in words(drawn)
    assert plots.image_bytes(drawn, "png").startswith(b"\x89PNG")


def _small():
    figure = Figure(figsize=(2, 1))
    figure.add_subplot().plot([0, 1], label="a")
    return figure


def test_an_unknown_format_is_refused():
    with pytest.raises(InputError, match=r"png, svg, pdf.*'bmp'"):
        plots.image_bytes(_small(), "bmp")


def test_inline_svg_loads_nothing_from_elsewhere(figure):
    text = plots.inline_svg(figure)
    assert text.startswith("<svg")
    links = set(re.findall(r'https?://[^"\s<]+', text))
    assert links <= {"http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"}  # namespaces
    assert all(link.startswith("#") for link in re.findall(r'href="([^"]*)"', text))
    assert "<script" not in text and "@import" not in text


def test_a_file_name_cannot_break_out_of_the_svg():
    made = forecast(source="--><img src=x onerror=alert(1)><!--.csv")
    text = plots.inline_svg(plots.forecast_figure(made))
    assert "onerror" in text and "<img" not in text and "--><" not in text


def test_drawing_needs_no_display_and_leaves_pyplot_alone():
    program = (
        "import sys; from forecaster import plots; from tests.hand_built import forecast; "
        "plots.image_bytes(plots.forecast_figure(forecast()), 'png'); "
        "print('matplotlib.pyplot' in sys.modules)"
    )
    run = subprocess.run(
        [sys.executable, "-c", program], capture_output=True, text=True, check=True
    )
    assert run.stdout.strip() == "False"
