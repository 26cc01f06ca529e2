"""The sessions of the three calendars, frozen so that the story never shifts: weekdays that are not listed as closed.

The closed days are those of exchange_calendars 4.13.2; a test compares them with the library installed.
"""

from __future__ import annotations

from datetime import date, timedelta

FIRST = date(2020, 1, 1)
LAST = date(2026, 12, 31)

CLOSED_TEXT = {
    "XDUB": {
        2020: "01-01 04-10 04-13 05-01 12-25 12-28",
        2021: "01-01 04-02 04-05 05-03 12-27 12-28",
        2022: "01-03 04-15 04-18 05-02 12-26 12-27",
        2023: "01-02 04-07 04-10 05-01 12-25 12-26",
        2024: "01-01 03-29 04-01 05-01 05-06 12-25 12-26",
        2025: "01-01 04-18 04-21 05-01 05-05 12-25 12-26",
        2026: "01-01 04-03 04-06 05-01 05-04 12-25 12-28",
    },
    "XNYS": {
        2020: "01-01 01-20 02-17 04-10 05-25 07-03 09-07 11-26 12-25",
        2021: "01-01 01-18 02-15 04-02 05-31 07-05 09-06 11-25 12-24",
        2022: "01-17 02-21 04-15 05-30 06-20 07-04 09-05 11-24 12-26",
        2023: "01-02 01-16 02-20 04-07 05-29 06-19 07-04 09-04 11-23 12-25",
        2024: "01-01 01-15 02-19 03-29 05-27 06-19 07-04 09-02 11-28 12-25",
        2025: "01-01 01-09 01-20 02-17 04-18 05-26 06-19 07-04 09-01 11-27 12-25",
        2026: "01-01 01-19 02-16 04-03 05-25 06-19 07-03 09-07 11-26 12-25",
    },
    "XTKS": {
        2020: "01-01 01-02 01-03 01-13 02-11 02-24 03-20 04-29 05-04 05-05 05-06 07-23 07-24 08-10 09-21 09-22 10-01"
        " 11-03 11-23 12-31",
        2021: "01-01 01-11 02-11 02-23 04-29 05-03 05-04 05-05 07-22 07-23 08-09 09-20 09-23 11-03 11-23 12-31",
        2022: "01-03 01-10 02-11 02-23 03-21 04-29 05-03 05-04 05-05 07-18 08-11 09-19 09-23 10-10 11-03 11-23",
        2023: "01-02 01-03 01-09 02-23 03-21 05-03 05-04 05-05 07-17 08-11 09-18 10-09 11-03 11-23",
        2024: "01-01 01-02 01-03 01-08 02-12 02-23 03-20 04-29 05-03 05-06 07-15 08-12 09-16 09-23 10-14 11-04 12-31",
        2025: "01-01 01-02 01-03 01-13 02-11 02-24 03-20 04-29 05-05 05-06 07-21 08-11 09-15 09-23 10-13 11-03 11-24"
        " 12-31",
        2026: "01-01 01-02 01-12 02-11 02-23 03-20 04-29 05-04 05-05 05-06 07-20 08-11 09-21 09-22 09-23 10-12 11-03"
        " 11-23 12-31",
    },
}
CALENDARS = tuple(CLOSED_TEXT)
CLOSED = {
    calendar: frozenset(date.fromisoformat(f"{year}-{day}") for year, days in years.items() for day in days.split())
    for calendar, years in CLOSED_TEXT.items()
}


def is_session(calendar: str, day: date) -> bool:
    """Whether a calendar has a session on a day. Raises ValueError outside the years that are frozen here."""
    if not FIRST <= day <= LAST:
        raise ValueError(f"{day} lies outside the frozen sessions, {FIRST} to {LAST}")
    return day.weekday() < 5 and day not in CLOSED[calendar]


def business_dates(first: date, last: date) -> tuple[date, ...]:
    """The days from first to last, both included, on which at least one of the calendars has a session."""
    days = (first + timedelta(days=step) for step in range((last - first).days + 1))
    return tuple(day for day in days if any(is_session(calendar, day) for calendar in CALENDARS))
