"""Year fractions between two calendar dates under the day counts the trade uses for option expiries.

``ACT/365F``: days / 365. ``ACT/360``: days / 360. ``ACT/ACT``: days that fall in leap years / 366 plus days that fall
in other years / 365 (2006 ISDA Definitions, section 4.16(b) "Actual/Actual (ISDA)", section number from memory).
The first day counts, the last does not, so fractions over adjoining periods add up exactly as the day counts do.
"""

from __future__ import annotations

import re
from calendar import isleap
from collections.abc import Callable
from datetime import date, datetime
from typing import Final

from engine.errors import InputError

__all__ = ["DAY_COUNTS", "year_fraction"]

_ISO_DATE: Final = re.compile(r"[0-9]{4}-[0-9]{2}-[0-9]{2}")
_ALLOWED: Final = "a date YYYY-MM-DD without a time of day"


def _actual_365_fixed(start: date, end: date) -> float:
    return (end - start).days / 365.0


def _actual_360(start: date, end: date) -> float:
    return (end - start).days / 360.0


def _actual_actual(start: date, end: date) -> float:
    """Split at each New Year; whole years between count one each."""
    if end < start:
        return -_actual_actual(end, start)
    if start.year == end.year:
        return (end - start).days / _year_length(start.year)
    before_new_year = _year_length(start.year) - (start - date(start.year, 1, 1)).days
    after_new_year = (end - date(end.year, 1, 1)).days
    whole_years = end.year - start.year - 1
    return before_new_year / _year_length(start.year) + whole_years + after_new_year / _year_length(end.year)


def _year_length(year: int) -> float:
    return 366.0 if isleap(year) else 365.0


DAY_COUNTS: dict[str, Callable[[date, date], float]] = {
    "ACT/365F": _actual_365_fixed,
    "ACT/360": _actual_360,
    "ACT/ACT": _actual_actual,
}


def year_fraction(start: date | str, end: date | str, *, day_count: str = "ACT/365F") -> float:
    """Years from ``start`` to ``end`` under ``day_count``; negative when ``end`` is before ``start``.

    Dates are ``datetime.date`` or ISO 8601 calendar dates ``"YYYY-MM-DD"``; ``day_count`` is one of ``DAY_COUNTS``,
    spelled exactly so. Accurate to two roundings. Raises InputError when the name is unknown or an argument is not a
    calendar date (a date with a time of day has no day count: say which date is meant).
    """
    first, last = _calendar_date("start", start), _calendar_date("end", end)
    rule = DAY_COUNTS.get(day_count)
    if rule is None:
        raise InputError("day_count", f"{day_count!r} is not known", allowed=", ".join(DAY_COUNTS))
    return rule(first, last)


def _calendar_date(name: str, value: date | str) -> date:
    if isinstance(value, str) and _ISO_DATE.fullmatch(value):
        try:
            return date.fromisoformat(value)
        except ValueError:
            raise InputError(name, f"{value} is not in the calendar", allowed=_ALLOWED) from None
    if isinstance(value, datetime) or not isinstance(value, date):
        raise InputError(name, "is not a calendar date", allowed=_ALLOWED)
    return value
