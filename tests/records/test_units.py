import pytest

from forecaster.errors import InputError
from forecaster.records.units import length_scale, split_unit, time_scale


@pytest.mark.parametrize(
    ("heading", "name", "unit"),
    [
        ("elevation_m", "elevation", "m"),
        ("eta [cm]", "eta", "cm"),
        ("heave (mm)", "heave", "mm"),
        ("surface elevation / ft", "surface elevation", "ft"),
        ("time_s", "time", "s"),
        ("t [s]", "t", "s"),
        ("level {fathom}", "level", "fathom"),  # stated, though unknown
        ("water level m", "water level", "m"),
        ("eta", "eta", ""),
        ("sensor_2", "sensor_2", ""),
    ],
)
def test_headings_are_split_into_name_and_unit(heading, name, unit):
    assert split_unit(heading) == (name, unit)


def test_foot_is_the_international_one():
    # exact: international yard and pound agreement 1959, 1 ft = 0.3048 m
    assert length_scale("feet") == 0.3048
    # exact: 12 inches are one foot
    assert length_scale("inch") * 12 == pytest.approx(0.3048, rel=1e-15)


def test_decimal_units_are_powers_of_ten():
    # exact: SI prefixes
    assert [length_scale(u) for u in ("m", "dm", "cm", "mm")] == [1, 0.1, 0.01, 0.001]
    assert [time_scale(u) for u in ("s", "ms", "min", "h")] == [1, 0.001, 60, 3600]


@pytest.mark.parametrize("unit", ["fathom", "", "s", "dbar"])
def test_unknown_length_is_refused_with_the_known_ones(unit):
    with pytest.raises(InputError, match=r"known unit of elevation.*mm"):
        length_scale(unit)


@pytest.mark.parametrize("unit", ["m", "", "days"])
def test_unknown_time_is_refused(unit):
    with pytest.raises(InputError, match="known unit of time"):
        time_scale(unit)
