"""Sessions: which dates, when they close, and which one a stamp or a span belongs to."""

from __future__ import annotations

import datetime as dt
import hashlib
from zoneinfo import ZoneInfo

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from miner.errors import CalendarError
from miner.read_tables import OPEN_END, OPEN_START
from miner.session_calendar import SessionCalendar, build_calendar, calendar_timezone
from miner.settings import study_from_dict


def us(text: str, zone: str = "UTC") -> int:
    """Microseconds of a local time, worked out without the package."""
    stamp = dt.datetime.fromisoformat(text).replace(tzinfo=ZoneInfo(zone))
    return (stamp - dt.datetime(1970, 1, 1, tzinfo=dt.UTC)) // dt.timedelta(microseconds=1)


def study(folder=".", **sessions):
    tables = {"alerts": {"source": "a.csv"}, "events": {"source": "e.csv"}}
    return study_from_dict({**tables, "sessions": sessions}, folder)


def calendar(first="2020-01-02T12:00", last="2020-01-31T12:00", folder=".", **sessions):
    return build_calendar(study(folder, **sessions), us(first), us(last))


def session(cal: SessionCalendar, text: str, zone: str | None = None) -> int:
    """Session of one stamp in the calendar's timezone; text of a date alone is a bare date."""
    stamp = np.array([us(text, zone or cal.timezone)])
    found = cal.session_of(stamp, np.array([len(text) == 10]))
    assert found.dtype == np.int32
    return int(found[0])


def days(cal: SessionCalendar) -> list[str]:
    return [str(date) for date in cal.dates]


def test_weekdays_run_from_the_first_stamps_session_to_the_lasts():
    # Friday after the close to Saturday: Monday the 6th to Monday the 13th
    cal = calendar("2020-01-03T16:00:01", "2020-01-11T10:00")
    assert days(cal) == [
        "2020-01-06", "2020-01-07", "2020-01-08", "2020-01-09", "2020-01-10", "2020-01-13",
    ]  # fmt: skip
    assert len(cal) == 6
    assert cal.name == "weekdays"
    assert cal.timezone == "UTC"
    assert cal.closes_us.tolist() == [us(f"{day}T16:00") for day in days(cal)]
    assert cal.opens_after_us == us("2020-01-03T16:00")


def test_a_stamp_belongs_to_the_first_session_that_closes_at_or_after_it():
    cal = calendar(start="2020-01-06", end="2020-01-14", close="15:30")
    assert len(cal) == 7
    assert session(cal, "2020-01-06T15:30") == 0
    assert session(cal, "2020-01-06T15:30:00.000001") == 1
    assert session(cal, "2020-01-10T15:31") == 5  # Friday after the close: Monday
    assert session(cal, "2020-01-11T09:00") == 5
    assert session(cal, "2020-01-13T15:30") == 5


def test_stamps_outside_are_minus_one_and_past_the_last():
    cal = calendar(start="2020-01-06", end="2020-01-10")
    assert session(cal, "2020-01-03T16:00") == -1
    assert session(cal, "2020-01-03T16:00:00.000001") == 0  # Friday evening is Monday's
    assert session(cal, "2020-01-10T16:00") == 4
    assert session(cal, "2020-01-10T16:00:00.000001") == 5 == len(cal)
    assert session(cal, "1900-01-01T00:00") == -1
    assert session(cal, "2100-01-01T00:00") == 5


def test_a_bare_date_belongs_to_the_first_session_on_or_after_it():
    cal = calendar(start="2020-01-06", end="2020-01-14", timezone="America/New_York")
    assert session(cal, "2020-01-06") == 0
    assert session(cal, "2020-01-10") == 4
    assert session(cal, "2020-01-11") == 5
    assert session(cal, "2020-01-04") == 0  # the Saturday before, as a stamp of that day would
    assert session(cal, "2020-01-03") == -1
    assert session(cal, "2020-01-14") == 6
    assert session(cal, "2020-01-15") == 7


def test_bare_dates_and_times_in_one_call():
    cal = calendar(start="2020-01-06", end="2020-01-10")
    stamps = np.array([us("2020-01-08"), us("2020-01-07T17:00"), us("2020-01-07")])
    assert cal.session_of(stamps, np.array([True, False, True])).tolist() == [2, 2, 1]
    assert cal.session_of(np.zeros(0, np.int64), np.zeros(0, bool)).tolist() == []


def test_closes_follow_the_clock_through_both_changes_in_new_york():
    keys = {"timezone": "America/New_York", "calendar": "daily", "close": "16:00"}
    spring = calendar(start="2020-03-07", end="2020-03-09", **keys)
    assert spring.closes_us.tolist() == [
        us("2020-03-07T21:00"), us("2020-03-08T20:00"), us("2020-03-09T20:00"),
    ]  # fmt: skip
    assert session(spring, "2020-03-08T20:00:01", "UTC") == 2
    autumn = calendar(start="2020-10-31", end="2020-11-02", **keys)
    assert autumn.closes_us.tolist() == [
        us("2020-10-31T20:00"), us("2020-11-01T21:00"), us("2020-11-02T21:00"),
    ]  # fmt: skip
    assert session(autumn, "2020-11-01T21:00", "UTC") == 1
    # a close inside the hour that is skipped, or comes twice
    keys["close"] = "02:30"
    assert calendar(start="2020-03-07", end="2020-03-09", **keys).closes_us[1] == us(
        "2020-03-08T07:00"
    )
    keys["close"] = "01:30"
    assert calendar(start="2020-10-31", end="2020-11-02", **keys).closes_us[1] == us(
        "2020-11-01T05:30"
    )


def test_start_and_end_on_a_weekend_move_inwards():
    cal = calendar(start="2020-01-04", end="2020-01-12")
    assert (days(cal)[0], days(cal)[-1]) == ("2020-01-06", "2020-01-10")
    assert len(calendar(start="2020-01-04", end="2020-01-12", calendar="daily")) == 9
    with pytest.raises(CalendarError, match="none from 2020-01-04 to 2020-01-05"):
        calendar(start="2020-01-04", end="2020-01-05")


def test_dates_that_run_backwards_or_too_far_are_refused():
    with pytest.raises(CalendarError, match="run forward") as caught:
        calendar(start="2021-01-04")
    assert "the last 2020-01-31 is that of the last stamp" in str(caught.value)
    with pytest.raises(CalendarError, match="at most 200 years") as caught:
        calendar(last="9999-12-31T00:00")
    assert "the first 2020-01-02 is that of the first stamp" in str(caught.value)


# Early closes at 13:00 on 3 July and 29 November 2019, and the holidays between: NYSE's own
# published calendar for 2019.
def test_an_exchange_closes_early_where_it_did():
    cal = calendar("2019-07-01T12:00", "2019-12-02T12:00", calendar="XNYS")
    assert cal.timezone == "America/New_York"
    at = days(cal).index
    assert days(cal)[:4] == ["2019-07-01", "2019-07-02", "2019-07-03", "2019-07-05"]
    for day, close in (
        ("2019-07-02", "16:00"),
        ("2019-07-03", "13:00"),
        ("2019-11-27", "16:00"),
        ("2019-11-29", "13:00"),
        ("2019-12-02", "16:00"),
    ):
        assert cal.closes_us[at(day)] == us(f"{day}T{close}", "America/New_York")
    assert session(cal, "2019-07-03T13:00") == at("2019-07-03")
    assert session(cal, "2019-07-03T13:01") == at("2019-07-05")
    assert session(cal, "2019-07-04") == at("2019-07-05")
    assert session(cal, "2019-11-28T10:00") == at("2019-11-29")
    assert session(cal, "2019-11-29T13:00:01") == at("2019-12-02")
    assert session(cal, "2019-06-28T16:00") == -1
    assert session(cal, "2019-06-28T16:01") == 0


def test_an_exchange_calendar_with_dates_set_and_another_timezone():
    cal = calendar(calendar="NYSE", start="2019-07-04", end="2019-07-07", timezone="Europe/London")
    assert days(cal) == ["2019-07-05"]
    assert cal.timezone == calendar_timezone(study(timezone="Europe/London")) == "Europe/London"
    assert cal.opens_after_us == us("2019-07-03T18:00", "Europe/London")
    assert session(cal, "2019-07-05T21:00") == 0
    assert session(cal, "2019-07-05T21:01") == 1


def test_sessions_that_close_at_midnight_keep_bare_dates_on_their_own_day():
    cal = calendar("2020-01-04", "2020-01-06", calendar="24/7")
    assert days(cal)[-1] == "2020-01-06"
    assert session(cal, "2020-01-06") == len(cal) - 1
    assert session(cal, "2020-01-06T00:00") == len(cal) - 2


def test_the_timezone_is_the_exchanges_own_or_as_set_or_utc():
    assert calendar_timezone(study()) == "UTC"
    assert calendar_timezone(study(timezone="Asia/Tokyo")) == "Asia/Tokyo"
    assert calendar_timezone(study(calendar="XTKS")) == "Asia/Tokyo"
    assert calendar_timezone(study(calendar="XSAU")) == "Asia/Riyadh"


@pytest.mark.parametrize(
    ("sessions", "first", "found"),
    [
        ({"calendar": "XNYZ"}, "2020-01-02", "Did you mean"),
        ({"calendar": "weekday"}, "2020-01-02", 'must be "weekdays", "daily", a known exchange'),
        ({"calendar": "XHKG", "start": "1950-01-02"}, "2020-01-02", "lie between 1960-01-01 and"),
        ({"calendar": "XHKG", "end": "2060-01-02"}, "2020-01-02", "2049-12-31 for XHKG"),
        ({"calendar": "XHKG"}, "1950-01-02", "got 1950-01-02 to 2020-01-31"),
    ],
)
def test_an_exchange_that_cannot_answer_is_one_clear_message(sessions, first, found):
    with pytest.raises(CalendarError) as caught:
        calendar(first, **sessions)
    assert found in str(caught.value)
    assert "\n" not in str(caught.value)


def test_an_exchange_at_the_edge_of_what_is_known_still_answers():
    cal = calendar(calendar="XHKG", start="1960-01-01", end="1960-02-01")
    assert days(cal)[0] >= "1960-01-01"
    assert session(cal, f"{days(cal)[0]}T10:00") == 0
    # nothing is known before the first session: it takes in the 24 hours before its close
    assert cal.opens_after_us == cal.closes_us[0] - 86_400_000_000


# a csv of dates


def write_dates(folder, *lines, header="date"):
    (folder / "dates.csv").write_text("\n".join([header, *lines]) + "\n")


def test_a_csv_of_dates_with_early_closes(tmp_path):
    write_dates(
        tmp_path,
        "2020-01-02,",
        "2020-01-03,13:00",
        "2020-01-08,",
        "2020-01-10,",
        header="date,close",
    )
    keys = {"calendar": "dates.csv", "folder": tmp_path, "close": "17:00"}
    cal = calendar("2020-01-02T10:00", "2020-01-08T17:00", **keys)
    assert days(cal) == ["2020-01-02", "2020-01-03", "2020-01-08"]
    assert cal.closes_us.tolist() == [
        us("2020-01-02T17:00"), us("2020-01-03T13:00"), us("2020-01-08T17:00"),
    ]  # fmt: skip
    assert session(cal, "2020-01-03T13:01") == 2
    assert session(cal, "2020-01-04") == 2
    # before the first date listed: the 24 hours up to its close are its own
    assert session(cal, "2020-01-01T17:01") == 0
    assert session(cal, "2020-01-01T17:00") == -1
    assert session(cal, "2020-01-01") == -1
    later = calendar(start="2020-01-04", end="2020-01-31", **keys)
    assert days(later) == ["2020-01-08", "2020-01-10"]
    assert later.opens_after_us == us("2020-01-03T13:00")


def test_stamps_beyond_a_csv_of_dates_are_outside(tmp_path):
    write_dates(tmp_path, "2020-01-02", "2020-01-03")
    cal = calendar("2019-06-01", "2020-06-01", calendar="dates.csv", folder=tmp_path)
    assert days(cal) == ["2020-01-02", "2020-01-03"]
    assert session(cal, "2019-06-01") == -1
    assert session(cal, "2020-06-01T00:00") == 2


def test_wrong_rows_of_a_csv_of_dates_are_listed(tmp_path):
    write_dates(
        tmp_path,
        "2020-01-03,", "2020-01-02,", "2020-01-03,", "2020-02-30,", ",", "2020-01-06,1pm",
        header="date,close",
    )  # fmt: skip
    with pytest.raises(CalendarError) as caught:
        calendar(calendar="dates.csv", folder=tmp_path)
    assert str(caught.value).splitlines()[1:] == [
        "  row 2, column date: 2020-01-02 is not after 2020-01-03",
        "  row 3, column date: 2020-01-03 is not after 2020-01-03",
        '  row 4, column date: "2020-02-30" is no date such as 2019-01-02',
        '  row 5, column date: "" is no date such as 2019-01-02',
        '  row 6, column close: "1pm" is no time such as 13:00',
    ]


@pytest.mark.parametrize(
    ("content", "found"),
    [
        (None, "No such file"),
        ("", "got nothing"),
        ("day\n2020-01-02\n", "got columns `day`"),
        ("date\n", "got no rows"),
    ],
)
def test_a_csv_of_dates_that_is_none(tmp_path, content, found):
    if content is not None:
        (tmp_path / "dates.csv").write_text(content)
    with pytest.raises(CalendarError, match=found):
        calendar(calendar="dates.csv", folder=tmp_path)


# spans


def spans(cal, *texts, side):
    is_bare = np.array([len(text) == 10 for text in texts])
    open_us = OPEN_START if side == "start" else OPEN_END
    stamps = np.array([us(text, cal.timezone) if text else open_us for text in texts])
    found = (cal.span_start if side == "start" else cal.span_end)(stamps, is_bare)
    assert found.dtype == np.int32
    return found.tolist()


def test_spans_start_and_end_on_the_sessions_inside_them():
    cal = calendar(start="2020-01-06", end="2020-01-14", timezone="America/New_York")
    assert spans(
        cal, "2020-01-07", "2020-01-11", "2020-01-01", "2020-01-14", "2020-01-15", "", side="start"
    ) == [1, 5, 0, 6, 7, 0]
    assert spans(
        cal, "2020-01-07T15:00", "2020-01-07T17:00", "1999-01-01T01:00", "2020-01-14T17:00",
        side="start",
    ) == [1, 2, 0, 7]  # fmt: skip
    assert spans(
        cal, "2020-01-07", "2020-01-11", "2020-01-05", "2020-01-06", "2020-01-20", "", side="end"
    ) == [1, 4, -1, 0, 6, 6]
    assert spans(
        cal, "2020-01-07T15:00", "2020-01-07T17:00", "1999-01-01T01:00", "2020-01-14T17:00",
        side="end",
    ) == [1, 2, -1, 6]  # fmt: skip


def test_the_first_session_on_or_after_a_date():
    cal = calendar(start="2020-01-06", end="2020-01-14")
    found = [cal.index_of_date(dt.date(2020, 1, day)) for day in (1, 6, 7, 11, 14, 15)]
    assert found == [0, 0, 1, 5, 6, 7]


# fingerprint and independence of bounds


def test_the_fingerprint_is_of_dates_and_closes():
    cal = calendar(start="2020-01-06", end="2020-01-10")
    numbers = np.concatenate([cal.dates.astype("<i8"), cal.closes_us.astype("<i8")])
    assert cal.fingerprint == hashlib.sha256(numbers.tobytes()).hexdigest()
    assert cal.fingerprint == calendar(start="2020-01-04", end="2020-01-12").fingerprint
    assert cal.fingerprint != calendar(start="2020-01-06", end="2020-01-13").fingerprint
    assert (
        cal.fingerprint != calendar(start="2020-01-06", end="2020-01-10", close="17:00").fingerprint
    )


def test_a_calendar_made_by_hand_starts_the_day_after_the_day_before():
    dates = np.array(["2020-01-06", "2020-01-07"], "M8[D]")
    closes = np.array([us("2020-01-06T16:00"), us("2020-01-07T16:00")])
    cal = SessionCalendar("hand", "UTC", dates, closes, us("2020-01-05T16:00"), "")
    assert [session(cal, day) for day in ("2020-01-05", "2020-01-06", "2020-01-08")] == [-1, 0, 2]


@given(
    st.lists(st.integers(0, 40 * 24 * 4), min_size=1, max_size=20),
    st.sampled_from(["weekdays", "daily"]),
    st.sampled_from(["00:00", "09:15", "16:00", "23:59:59"]),
)
def test_every_stamp_that_made_the_calendar_lies_inside_it(quarters, kind, close):
    stamps = us("2020-10-05T00:00") + np.array(quarters) * 15 * 60 * 1_000_000
    made = study(calendar=kind, close=close, timezone="America/New_York")
    cal = build_calendar(made, int(stamps.min()), int(stamps.max()))
    found = cal.session_of(stamps, np.zeros(len(stamps), bool))
    assert found.min() == 0
    assert found.max() <= len(cal) - 1
    closes = cal.closes_us.tolist()
    expected = [next(k for k, c in enumerate(closes) if c >= stamp) for stamp in stamps.tolist()]
    assert found.tolist() == expected
