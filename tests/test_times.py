"""Times at the edge: what is a time, and which instant it names."""

from datetime import UTC, datetime, timedelta, timezone

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.times import MAX_MS, TimeError, format_ms, parse_rfc3339, parse_time, parse_time_text

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


@pytest.mark.parametrize(
    ("text", "at_ms"),
    [
        # Klyne and Newman, RFC 3339, 2002, section 5.8; strings from memory, instants recomputed with calendar.timegm.
        ("1985-04-12T23:20:50.52Z", 482_196_050_520),
        ("1996-12-19T16:39:57-08:00", 851_042_397_000),
        ("1996-12-20T00:39:57Z", 851_042_397_000),
        ("1990-12-31T23:59:60Z", 662_688_000_000),
        ("1990-12-31T15:59:60-08:00", 662_688_000_000),
        ("1937-01-01T12:00:27.87+00:20", -1_041_337_172_130),
        # CloudEvents 1.0, the example of the HTTP protocol binding.
        ("2018-04-05T17:31:00Z", 1_522_949_460_000),
    ],
)
def test_published_examples(text: str, at_ms: int) -> None:
    """The examples of the standards name the instants that they say."""
    assert parse_rfc3339(text) == at_ms


@pytest.mark.parametrize(
    ("text", "at_ms"),
    [
        ("1970-01-01T00:00:00Z", 0),
        ("1970-01-01t00:00:01z", 1_000),
        ("1970-01-01T00:00:00-00:00", 0),
        ("1970-01-01T00:00:00.1Z", 100),
        ("1970-01-01T00:00:00.0019999999999Z", 1),
        ("1970-01-01T01:00:00+01:00", 0),
        ("1969-12-31T23:00:00-01:00", 0),
        ("2024-02-29T00:00:00Z", 1_709_164_800_000),
        ("9999-12-31T23:59:59.999Z", MAX_MS),
    ],
)
def test_legal_spellings(text: str, at_ms: int) -> None:
    """Lower case, any number of decimals, an unknown local offset and leap days are legal."""
    assert parse_time(text) == at_ms


@pytest.mark.parametrize(
    "text",
    [
        "",
        "now",
        "2026-05-04",
        "2026-05-04T09:00:00",
        "2026-05-04 09:00:00Z",
        "20260504T090000Z",
        "2026-W19-1T09:00:00Z",
        "2026-05-04T09:00Z",
        "2026-05-04T09:00:00+0200",
        "2026-05-04T09:00:00+02",
        "2026-05-04T09:00:00.Z",
        "2026-05-04T09:00:00,5Z",
        "2026-05-04T24:00:00Z",
        "2026-05-04T09:60:00Z",
        "2026-05-04T09:00:61Z",
        "2026-05-04T09:00:60Z",
        "2026-05-04T23:59:60+02:00",
        "2026-05-04T09:00:00+24:00",
        "2026-05-04T09:00:00+02:60",
        "2026-02-29T00:00:00Z",
        "2026-13-01T00:00:00Z",
        "2026-00-10T00:00:00Z",
        "2026-04-31T00:00:00Z",
        "0000-01-01T00:00:00Z",
        "2026-05-04T09:00:00Z\n",
        " 2026-05-04T09:00:00Z",
        "٢٠٢٦-05-04T09:00:00Z",
        "2026-05-04T09:00:00\u221202:00",
    ],
)
def test_other_text_is_no_time(text: str) -> None:
    """Week dates, missing offsets, impossible days and whatever else is not RFC 3339 are refused."""
    with pytest.raises(TimeError):
        parse_rfc3339(text)


@pytest.mark.parametrize(
    "value",
    [
        -1,
        MAX_MS + 1,
        10**30,
        True,
        False,
        None,
        1.0,
        float("nan"),
        [],
        "1937-01-01T12:00:27.87+00:20",
        "1970-01-01T00:00:00+00:01",
        "9999-12-31T23:59:59-00:01",
        "1777885200000",
    ],
)
def test_values_outside_are_refused(value: object) -> None:
    """Years before 1970 or after 9999, booleans and fractions are no times."""
    with pytest.raises(TimeError):
        parse_time(value)


def test_integers_are_unix_milliseconds() -> None:
    """An integer names the millisecond itself, at both ends of the range."""
    assert [parse_time(value) for value in (0, 1_777_885_200_000, MAX_MS)] == [0, 1_777_885_200_000, MAX_MS]


def test_text_only_places_take_digits_too() -> None:
    """Where everything is text, digits are Unix milliseconds."""
    assert parse_time_text("1777885200000") == 1_777_885_200_000
    assert parse_time_text("2026-05-04T09:00:00Z") == 1_777_885_200_000


@pytest.mark.parametrize("text", ["-1", "1.5", "1e3", "9" * 400, "٣", ""])
def test_text_only_places_refuse_other_numbers(text: str) -> None:
    """Signs, fractions, exponents and foreign digits are no Unix milliseconds."""
    with pytest.raises(TimeError):
        parse_time_text(text)


@given(st.integers(0, MAX_MS))
def test_written_times_read_back(at_ms: int) -> None:
    """A time that was written names the same millisecond when read."""
    assert parse_rfc3339(format_ms(at_ms)) == at_ms


@given(
    st.datetimes(min_value=datetime(1971, 1, 1), max_value=datetime(9998, 1, 1)),  # noqa: DTZ001  shifted below
    st.integers(-1439, 1439),
)
def test_agrees_with_the_standard_library(local: datetime, offset_minutes: int) -> None:
    """The standard library's own spelling names the instant that it says, cut to milliseconds."""
    moment = local.replace(tzinfo=timezone(timedelta(minutes=offset_minutes)))
    assert parse_rfc3339(moment.isoformat()) == (moment - EPOCH) // timedelta(milliseconds=1)


@given(st.text(max_size=40))
def test_any_text_is_a_time_or_refused(text: str) -> None:
    """No text makes the parser fail in another way."""
    try:
        parse_time_text(text)
    except TimeError:
        return
