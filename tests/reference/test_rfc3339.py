"""RFC 3339 text to nanoseconds, against the RFC's own examples, published vectors and the standard library's traps."""

from __future__ import annotations

import datetime
import re

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st
from strandline.core.columns import TIME_MAX, TIME_MIN
from strandline.ingest.timestamps import (
    UNIT_NS,
    TimestampError,
    format_rfc3339,
    from_unit,
    from_unit_column,
    parse_rfc3339,
    parse_rfc3339_column,
    unit_bounds,
)

SECOND = 1_000_000_000

# RFC 3339 section 5.8 (texts); instants computed independently of this project, in microseconds.
EXAMPLES = [
    ("1985-04-12T23:20:50.52Z", 482196050520000),
    ("1996-12-19T16:39:57-08:00", 851042397000000),
    ("1996-12-20T00:39:57Z", 851042397000000),
    ("1990-12-31T23:59:60Z", 662688000000000),
    ("1990-12-31T15:59:60-08:00", 662688000000000),
    ("1991-01-01T00:00:00Z", 662688000000000),
    ("1937-01-01T12:00:27.87+00:20", -1041337172130000),
    ("1937-01-01T11:40:27.87Z", -1041337172130000),
    ("2018-04-05T17:31:00Z", 1522949460000000),  # CloudEvents examples
]

# JSON-Schema-Test-Suite (MIT), tests/draft2020-12/optional/format/date-time.json.
SUITE_VALID = [
    "1963-06-19T08:30:06.283185Z",
    "1963-06-19T08:30:06Z",
    "1937-01-01T12:00:27.87+00:20",
    "1990-12-31T15:59:50.123-08:00",
    "1998-12-31T23:59:60Z",
    "1998-12-31T15:59:60.123-08:00",
    "1963-06-19t08:30:06.283185z",
    "1985-04-12T00:59:59.999999999999999Z",
]
SUITE_INVALID = [
    "1998-12-31T23:59:61Z",
    "1998-12-31T23:58:60Z",
    "1998-12-31T22:59:60Z",
    "2016-12-31T24:59:60+01:00",
    "1990-02-31T15:59:59.123-08:00",
    "1990-12-31T15:59:59-24:00",
    "1990-12-31T24:00:00Z",
    "1990-12-31T15:60:00Z",
    "1990-12-31T10:00:00+10:60",
    "1985-04-12T23:20:50+01",
    "1963-06-19T08:30:06.28123+01:00Z",
    "06/19/1963 08:30:06 PST",
    "2013-350T01:01:01",
    "1963-6-19T08:30:06.283185Z",
    "1963-06-1T08:30:06.283185Z",
    "+11963-06-19T08:30:06.283185Z",
    "1985-04-12T23:20:50Z\n",
    "1963-06-1৪T00:00:00Z",  # Bengali digit
    "1963-06-11T0৪:00:00Z",
]

# Strings that CPython 3.11's datetime.fromisoformat accepts and the grammar of RFC 3339 section 5.6 does not.
STANDARD_LIBRARY_TRAPS = [
    "20130101T000000Z",
    "2013-W01-1T00:00:00Z",
    "2013-01-01T00:00:00,5Z",
    "2013-01-01",
    "2013-01-01T00:00Z",
    "2013-01-01T00:00:00",
    "2013-01-01T00:00:00+0100",
    "2013-01-01T00:00:00+01:00:30",
    "2013-01-01x00:00:00Z",
    "2013-01-01 00:00:00Z",
]

# RFC 3339 section 5.7 and appendix C (leap years), and what its grammar rules out.
FURTHER_INVALID = [
    "1900-02-29T00:00:00Z",
    "2013-02-29T00:00:00Z",
    "2013-00-10T00:00:00Z",
    "2013-13-10T00:00:00Z",
    "2013-01-00T00:00:00Z",
    "2013-04-31T00:00:00Z",
    "2013-01-01T00:00:00.Z",
    "2013-01-01T00:00:00+24:00",
    "2013-01-01T00:00:00 Z",
    " 2013-01-01T00:00:00Z",
    "2013-01-01T00:00:00Z ",
    "2013-01-01T00:00:00Z\x00",
    "2013-01-01T00:00:00−01:00",  # a minus sign that is not ASCII
    "2013-01-01T00:00:00+1:00",
    "2013-01-01T-1:00:00Z",
    "0000-13-01T00:00:00Z",
    "",
    "Z",
]

# RFC 9557 suffixes; an endpoint for plain RFC 3339 refuses every one.
SUFFIXES = [
    "2022-07-08T00:14:07+01:00[Europe/Paris]",
    "2022-07-08T00:14:07+01:00[!Europe/Paris]",
    "2022-07-08T00:14:07+01:00[knort=blargel]",
    "2022-07-08T00:14:07Z[!knort=blargel]",
    "1996-12-19T16:39:57-08:00[America/Los_Angeles][u-ca=hebrew]",
    "2022-07-08T00:14:07Z[u-ca=chinese][!u-ca=japanese]",
    "2022-07-08T00:14:07Z[!Europe/London]",
]

# RFC 3339 appendix D: date -> TAI-UTC after it. The last five: tz database (list valid to 2026-06-28).
LEAP_SECONDS = {
    "1972-06-30": 11, "1972-12-31": 12, "1973-12-31": 13, "1974-12-31": 14, "1975-12-31": 15, "1976-12-31": 16,
    "1977-12-31": 17, "1978-12-31": 18, "1979-12-31": 19, "1981-06-30": 20, "1982-06-30": 21, "1983-06-30": 22,
    "1985-06-30": 23, "1987-12-31": 24, "1989-12-31": 25, "1990-12-31": 26, "1992-06-30": 27, "1993-06-30": 28,
    "1994-06-30": 29, "1995-12-31": 30, "1997-06-30": 31, "1998-12-31": 32,
    "2005-12-31": 33, "2008-12-31": 34, "2012-06-30": 35, "2015-06-30": 36, "2016-12-31": 37,
}  # fmt: skip


def as_column(text: str) -> int:
    """The text through the column parser, among enough equal ones to take the vectorised way."""
    times, errors = parse_rfc3339_column([text] * 20)
    if errors:
        assert sorted(errors) == list(range(20))
        raise errors[7]
    assert len(set(times.tolist())) == 1
    return int(times[0])


both_ways = pytest.mark.parametrize("parse", [parse_rfc3339, as_column])


@both_ways
@pytest.mark.parametrize(("text", "microseconds"), EXAMPLES)
def test_examples_of_the_rfc(parse, text, microseconds):
    assert parse(text) == microseconds * 1000


@both_ways
def test_same_instant_in_other_words(parse):
    assert parse("2026-01-31T18:50:00-04:00") == parse("2026-01-31T22:50:00Z")  # section 4.2
    assert parse("2026-01-31T18:50:00-00:00") == parse("2026-01-31T18:50:00Z")  # section 4.3
    assert parse("2026-01-31t18:50:00z") == parse("2026-01-31T18:50:00Z")  # section 5.6
    assert parse("2000-02-29T00:00:00Z") + 86_400 * SECOND == parse("2000-03-01T00:00:00Z")  # appendix C


@both_ways
@pytest.mark.parametrize("text", SUITE_VALID)
def test_suite_valid(parse, text):
    plain = text.upper().replace(":60", ":59")
    cut = re.sub(r"\.(\d{1,6})\d*", r".\1", plain)  # what datetime can hold
    instant = datetime.datetime.fromisoformat(cut.replace("Z", "+00:00"))
    microseconds = (instant - datetime.datetime(1970, 1, 1, tzinfo=datetime.UTC)) // datetime.timedelta(microseconds=1)
    assert parse(text) // 1000 == microseconds + 1_000_000 * (":60" in text)


@both_ways
@pytest.mark.parametrize("text", SUITE_INVALID + STANDARD_LIBRARY_TRAPS + FURTHER_INVALID + SUFFIXES)
def test_invalid(parse, text):
    with pytest.raises(TimestampError) as caught:
        parse(text)
    assert caught.value.reason == "time_invalid"


@both_ways
@pytest.mark.parametrize(
    "text",
    ["0001-01-01T00:00:00Z", "9999-12-31T23:59:59.999999Z", "0000-01-01T00:00:00Z", "0000-02-29T00:00:00Z",
     "1677-09-21T00:12:43.145224191Z", "2262-04-11T23:47:16.854775808Z", "2262-04-12T00:00:00+00:00"],
)  # fmt: skip
def test_valid_but_outside_int64(parse, text):
    with pytest.raises(TimestampError) as caught:
        parse(text)
    assert caught.value.reason == "time_out_of_range"


@both_ways
def test_edges_of_int64(parse):
    assert parse("1677-09-21T00:12:43.145224192Z") == TIME_MIN
    assert parse("2262-04-11T23:47:16.854775807Z") == TIME_MAX
    assert parse("2262-04-11T23:47:16.8547758079999Z") == TIME_MAX


@both_ways
@pytest.mark.parametrize("date", LEAP_SECONDS)
def test_leap_seconds(parse, date):
    midnight = parse(f"{date}T23:59:59Z") + SECOND
    assert parse(f"{date}T23:59:60Z") == midnight
    assert parse(f"{date}T23:59:60.999999999999Z") == midnight + SECOND - 1
    local = parse_rfc3339(f"{date}T23:59:59Z") + (5 * 60 + 30) * 60 * SECOND
    shifted = format_rfc3339(local)[:17] + "60+05:30"
    assert parse(shifted) == midnight


def test_there_are_no_other_leap_seconds():
    day = datetime.date(1970, 1, 1)
    found = []
    while day < datetime.date(2027, 1, 1):
        try:
            parse_rfc3339(f"{day}T23:59:60Z")
            found.append(str(day))
        except TimestampError:
            pass
        day += datetime.timedelta(days=1)
    assert found == list(LEAP_SECONDS)
    assert list(LEAP_SECONDS.values()) == list(range(11, 38))


@both_ways
def test_digits_beyond_nanoseconds_are_cut_off_towards_the_past(parse):
    second = parse("1985-04-12T00:59:59Z")
    assert parse("1985-04-12T00:59:59.999999999999999Z") == second + SECOND - 1
    assert parse("1985-04-12T00:59:59.9999999999Z") == second + SECOND - 1  # datetime rolls this one over
    assert parse("1969-12-31T23:59:59.0000000019Z") == -SECOND + 1
    assert parse("1969-12-31T23:59:59.9" + "9" * 500 + "Z") == -1


times = st.integers(TIME_MIN, TIME_MAX)


@given(times)
@example(TIME_MIN)
@example(TIME_MAX)
@example(-1)
@example(0)
def test_text_and_back(time):
    text = format_rfc3339(time)
    assert parse_rfc3339(text) == time
    fraction = re.fullmatch(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d(?:\.(\d{3}|\d{6}|\d{9}))?Z", text)
    assert fraction is not None
    assert not (fraction[1] or "1").endswith("000")


@given(st.datetimes(datetime.datetime(1678, 1, 2), datetime.datetime(2261, 12, 30)), st.integers(-1439, 1439))
def test_agrees_with_datetime_where_datetime_can_hold_it(moment, offset):
    zone = datetime.timezone(datetime.timedelta(minutes=offset))
    exact = (moment - datetime.datetime(1970, 1, 1)) // datetime.timedelta(microseconds=1) * 1000 - offset * 60 * SECOND
    text = moment.replace(tzinfo=zone).isoformat()
    assert parse_rfc3339(text) == exact
    assert as_column(text) == exact


def _texts():
    pieces = st.tuples(
        st.sampled_from(
            ["2026-01-31", "1999-02-29", "1998-12-31", "0000-01-01", "1677-09-21", "2262-04-11", "2024-02-29"]
        ),
        st.sampled_from("TtxT "),
        st.sampled_from(["00:00:00", "23:59:60", "12:34:56", "24:00:00", "00:60:00", "0a:00:00"]),
        st.sampled_from(
            ["", ".", ".1", ".12", ".123", ".123456", ".12345678", ".999999999", ".9999999999", ".1x3", ",5"]
        ),
        st.sampled_from(["Z", "z", "+01:00", "-00:00", "+23:59", "+24:00", "-01:60", "", "+0100", "Z\n", "৪"]),
    ).map("".join)
    written = st.builds(lambda t, z: format_rfc3339(t)[:-1] + z, times, st.sampled_from(["Z", "z", "+05:30", "-08:00"]))
    return pieces | written | st.text(max_size=40) | st.text("0123456789-:.TZ+\n", min_size=18, max_size=36)


def _one(text):
    try:
        return parse_rfc3339(text)
    except TimestampError as error:
        return error.reason, str(error)


@given(st.lists(_texts(), max_size=60) | st.tuples(_texts(), st.integers(0, 40)).map(lambda pair: [pair[0]] * pair[1]))
@example(["2026-01-31T00:00:00Z\n2026-01-31T00:00:01Z"] + ["2026-01-31T00:00:00Z"] * 18 + [""])
@example(["2026-01-31T00:00:00Z"] * 19 + ["2026-01-31T00:00:0\n"])
@example([*["2026-01-31T00:00:00Z"] * 12, "2026-01-31T00:00:00Z\n2026-01-31T00:00:00Z", "", "2026-01-31T00:00:00"])
@example(["2026-01-31T00:00:00Z\n", "2026-01-31T00:00:0Z", *["2026-01-31T00:00:00Z"] * 18])
def test_column_and_scalar_agree(texts):
    found, errors = parse_rfc3339_column(texts)
    assert found.dtype == np.int64
    for row, text in enumerate(texts):
        error = errors.get(row)
        assert (int(found[row]) if error is None else (error.reason, str(error))) == _one(text)
        assert error is None or found[row] == 0


@given(st.lists(_texts().map(lambda text: text.encode("utf-8", "replace")), max_size=40))
def test_column_of_bytes(texts):
    found, errors = parse_rfc3339_column(texts)
    assert [None if row in errors else time for row, time in enumerate(found.tolist())] == [
        time if isinstance(time, int) else None for time in map(_one, texts)
    ]


def test_a_whole_day_of_every_fixed_form():
    start = parse_rfc3339("2024-02-28T23:00:00Z")
    forms = [(SECOND, "Z", 0), (1_001_000_000, "+05:30", 330), (1_000_001_000, "-08:00", -480), (1_000_000_001, "z", 0)]
    for step, suffix, minutes in forms:
        expected = [start + row * 17 * step for row in range(5000)]
        local = [format_rfc3339(time + minutes * 60 * SECOND)[:-1] + suffix for time in expected]
        found, errors = parse_rfc3339_column(local)
        assert not errors
        assert found.tolist() == expected


@given(st.sampled_from(list(UNIT_NS)), st.lists(st.integers(TIME_MIN, TIME_MAX), max_size=30))
def test_units(unit, values):
    found, outside = from_unit_column(np.array(values, np.int64), unit)
    least, greatest = unit_bounds(unit)
    for row, value in enumerate(values):
        inside = TIME_MIN <= value * UNIT_NS[unit] <= TIME_MAX
        assert inside == (least <= value <= greatest)
        if inside:
            assert found[row] == from_unit(value, unit) == value * UNIT_NS[unit]
            assert outside is None or not outside[row]
        else:
            assert outside is not None
            assert outside[row]
            assert found[row] == 0
            with pytest.raises(TimestampError, match="cannot hold") as caught:
                from_unit(value, unit)
            assert caught.value.reason == "time_out_of_range"
