"""Day counts against ISDA's own worked examples and against laws of the calendar."""

from __future__ import annotations

from datetime import date, datetime, timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st

from engine.errors import InputError
from engine.market.daycount import DAY_COUNTS, year_fraction

# "The Actual/Actual Day Count Fraction", ISDA paper of 1999 for the market conventions survey: the ISDA method's
# fractions in its examples, as days over 365 and over 366, and the interest it prints on 10,000 at 10 % a year (from
# memory).
ISDA_EXAMPLES = [
    ("2003-11-01", "2004-05-01", 61, 121, 497.72),
    ("1999-02-01", "1999-07-01", 150, 0, 410.96),
    ("1999-07-01", "2000-07-01", 184, 182, 1001.38),
    ("2002-08-15", "2003-07-15", 334, 0, 915.07),
    ("2003-07-15", "2004-01-15", 170, 14, 504.00),
    ("1999-07-30", "2000-01-30", 155, 29, 503.89),
    ("2000-01-30", "2000-06-30", 0, 152, 415.30),
    ("1999-11-30", "2000-04-30", 32, 120, 415.54),
]
DATES = st.dates(min_value=date(1901, 1, 1), max_value=date(2199, 12, 31))


@pytest.mark.parametrize(("start", "end", "common", "leap", "interest"), ISDA_EXAMPLES)
def test_actual_actual_gives_the_published_examples(start, end, common, leap, interest):
    years = year_fraction(start, end, day_count="ACT/ACT")
    assert years == pytest.approx(common / 365 + leap / 366, rel=1e-15)
    assert round(10_000 * 0.10 * years, 2) == interest


@pytest.mark.parametrize(("day_count", "expected"), [("ACT/365F", 366 / 365), ("ACT/360", 366 / 360), ("ACT/ACT", 1.0)])
def test_the_leap_year_2024(day_count, expected):
    """Days by the calendar: 2024 has 366."""
    assert year_fraction("2024-01-01", date(2025, 1, 1), day_count=day_count) == expected


def test_the_default_is_actual_365_fixed():
    assert year_fraction("2026-03-16", "2026-04-17") == 32 / 365


@given(start=DATES, end=DATES)
def test_fixed_denominators_count_days(start, end):
    """2006 ISDA Definitions, section 4.16 (d) and (e): actual days over 365, over 360 (section from memory)."""
    days = (end - start) / timedelta(days=1)
    assert year_fraction(start, end, day_count="ACT/365F") == days / 365
    assert year_fraction(start, end, day_count="ACT/360") == days / 360


@given(start=DATES, end=DATES)
def test_actual_actual_is_the_sum_of_its_days(start, end):
    """The definition itself, day by day: each day counts one over the length of the year it falls in."""
    first, last = min(start, end), max(start, end)
    last = min(last, first + timedelta(days=1500))
    total = {365: 0, 366: 0}
    day = first
    while day < last:
        total[(date(day.year + 1, 1, 1) - date(day.year, 1, 1)).days] += 1
        day += timedelta(days=1)
    expected = total[365] / 365 + total[366] / 366
    assert year_fraction(first, last, day_count="ACT/ACT") == pytest.approx(expected, rel=1e-14, abs=0)
    assert year_fraction(last, first, day_count="ACT/ACT") == pytest.approx(-expected, rel=1e-14, abs=0)


@given(days=st.lists(DATES, min_size=3, max_size=3), day_count=st.sampled_from(sorted(DAY_COUNTS)))
def test_adjoining_periods_add_up(days, day_count):
    a, b, c = sorted(days)
    whole = year_fraction(a, c, day_count=day_count)
    parts = year_fraction(a, b, day_count=day_count) + year_fraction(b, c, day_count=day_count)
    assert whole == pytest.approx(parts, rel=1e-14, abs=1e-14)


@pytest.mark.parametrize(
    ("start", "end", "day_count", "argument", "allowed"),
    [
        ("2026-02-30", "2026-04-17", "ACT/360", "start", "YYYY-MM-DD"),
        ("2026-03-16", "20260417", "ACT/360", "end", "YYYY-MM-DD"),
        ("2026-03-16", "2026-W16-5", "ACT/360", "end", "YYYY-MM-DD"),
        ("2026-03-16T00:00:00", "2026-04-17", "ACT/360", "start", "YYYY-MM-DD"),
        ("2026-03-16", datetime(2026, 4, 17, 12), "ACT/360", "end", "without a time"),
        ("2026-03-16", 20260417, "ACT/360", "end", "YYYY-MM-DD"),
        ("2026-03-16", "2026-04-17", "act/360", "day_count", "ACT/365F, ACT/360, ACT/ACT"),
        ("2026-03-16", "2026-04-17", "30/360", "day_count", "ACT/365F, ACT/360, ACT/ACT"),
    ],
)
def test_refusals_name_the_argument_and_what_is_allowed(start, end, day_count, argument, allowed):
    with pytest.raises(InputError) as caught:
        year_fraction(start, end, day_count=day_count)
    assert caught.value.argument == argument
    assert allowed in caught.value.allowed
