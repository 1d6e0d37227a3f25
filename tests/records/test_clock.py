from datetime import UTC, datetime, timedelta, timezone

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecaster.errors import InputError
from forecaster.records import clock

moments = st.datetimes(min_value=datetime(1950, 1, 1), max_value=datetime(2150, 1, 1))


@given(moments, st.integers(-14 * 60, 14 * 60), st.sampled_from(["T", " "]))
def test_stamps_agree_with_the_standard_library(moment, minutes, separator):
    # independent code: datetime of the Python standard library
    zoned = moment.replace(tzinfo=timezone(timedelta(minutes=minutes)))
    text = zoned.isoformat(sep=separator)
    seconds, has_zone = clock.instant(text)
    assert has_zone
    assert seconds == pytest.approx(zoned.timestamp(), abs=1e-6)
    together, zones = clock.instants([text.encode()])
    assert together[0] == pytest.approx(seconds, abs=1e-6)
    assert zones[0]


@given(st.lists(moments, min_size=1, max_size=20), st.booleans())
def test_many_stamps_equal_one_by_one(list_of_moments, zoned):
    texts = [m.isoformat() + ("Z" if zoned else "") for m in list_of_moments]
    together, zones = clock.instants([t.encode() for t in texts])
    np.testing.assert_allclose(together, [clock.instant(t)[0] for t in texts], rtol=0, atol=1e-6)
    assert (zones == zoned).all()


def test_known_instants():
    # exact: POSIX time counts from 1970-01-01T00:00:00Z without leap seconds
    assert clock.instant("1970-01-01T00:00:00Z") == (0.0, True)
    assert clock.instant("2000-03-01") == (951868800.0, False)  # exact: 11017 days
    assert clock.instant("20000301T000000.5Z") == (951868800.5, True)
    assert clock.instant("2000/03/01 01:00+01:00") == (951868800.0, True)


@pytest.mark.parametrize(
    "text",
    [
        "2031-02-29T00:00:00Z", "2031-13-01", "2031-01-01T24:00:00", "2031-01-01T10:60:00",
        "2031-01-01T00:00:00+25:00", "noon", "", "12:00", "2031-01-01T00:00:61",
    ],
)  # fmt: skip
def test_times_that_do_not_exist_are_refused_by_both_ways(text):
    with pytest.raises(InputError):
        clock.instant(text)
    assert np.isnan(clock.instants([text.encode()])[0][0])


@pytest.mark.parametrize("text", ["03/04/2031 10:00", "13.04.2031", "3-4-31 12:00:00"])
def test_day_or_month_first_is_refused_with_remedy(text):
    assert clock.is_stamp(text)
    with pytest.raises(InputError, match="cannot be told apart; write the year first"):
        clock.instant(text)


def test_issue_time_is_resolved_on_the_clock_of_the_record():
    assert clock.resolve("2031-05-01T10:00:00", calendar=True) == (
        datetime(2031, 5, 1, 10, tzinfo=UTC).timestamp()  # independent code: standard library
    )
    assert clock.resolve("12.5", calendar=False) == 12.5
    with pytest.raises(InputError, match="the record has none"):
        clock.resolve("2031-05-01T10:00:00", calendar=False)
    for bad in ("soon", "nan", np.inf, [1]):
        with pytest.raises(InputError):
            clock.resolve(bad, calendar=True)


def test_times_are_written_for_messages():
    assert clock.written(951868800.5, calendar=True) == "2000-03-01T00:00:00.500Z"
    assert clock.written(12.5, calendar=False) == "12.5 s"
