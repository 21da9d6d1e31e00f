"""The one clock, and the date of the laboratory around its midnight."""

import re
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from labplan.base import clock

ROOT = Path(clock.__file__).parents[2]


def at(text: str) -> Any:
    return clock.replaced_by(clock.standing_at(datetime.fromisoformat(text)))


@pytest.mark.parametrize(
    ("instant", "day"),
    [
        # winter: one hour before UTC's midnight
        ("2026-12-01T22:59:59.999999+00:00", date(2026, 12, 1)),
        ("2026-12-01T23:00:00+00:00", date(2026, 12, 2)),
        ("2026-12-02T00:00:00+00:00", date(2026, 12, 2)),
        # summer: two hours
        ("2026-07-31T21:59:59+00:00", date(2026, 7, 31)),
        ("2026-07-31T22:00:00+00:00", date(2026, 8, 1)),
        # the nights in which the clocks change
        ("2026-03-28T23:00:00+00:00", date(2026, 3, 29)),
        ("2026-03-29T21:59:59+00:00", date(2026, 3, 29)),
        ("2026-03-29T22:00:00+00:00", date(2026, 3, 30)),
        ("2026-10-24T21:59:59+00:00", date(2026, 10, 24)),
        ("2026-10-24T22:00:00+00:00", date(2026, 10, 25)),
        ("2026-10-25T22:59:59+00:00", date(2026, 10, 25)),
        ("2026-10-25T23:00:00+00:00", date(2026, 10, 26)),
        # the year and a leap day
        ("2026-12-31T23:00:00+00:00", date(2027, 1, 1)),
        ("2028-02-28T23:00:00+00:00", date(2028, 2, 29)),
        # an instant told in another zone is the same instant
        ("2026-12-01T18:00:00-05:00", date(2026, 12, 2)),
    ],
)
def test_the_day_turns_at_the_midnight_of_berlin(instant: str, day: date, settings: Any) -> None:
    settings.LAB_TIME_ZONE = "Europe/Berlin"
    with at(instant):
        assert clock.today() == day


@pytest.mark.parametrize(
    ("zone", "day"),
    [("UTC", date(2026, 12, 1)), ("Asia/Tokyo", date(2026, 12, 2)),
     ("America/Los_Angeles", date(2026, 12, 1)), ("Pacific/Kiritimati", date(2026, 12, 2))],
)  # fmt: skip
def test_the_day_is_that_of_the_laboratorys_zone(zone: str, day: date, settings: Any) -> None:
    settings.LAB_TIME_ZONE = zone
    with at("2026-12-01T23:30:00+00:00"):
        assert clock.today() == day


def test_a_standing_clock_stands_and_a_running_one_runs() -> None:
    start = datetime(2026, 12, 1, 8, 30, tzinfo=UTC)
    with clock.replaced_by(clock.standing_at(start)):
        assert clock.now() == clock.now() == start
    with clock.replaced_by(clock.running_from(start)):
        first, second = clock.now(), clock.now()
        assert start <= first <= second < start + timedelta(minutes=1)


def test_the_clock_before_comes_back_even_after_an_error() -> None:
    before = clock.now()
    with pytest.raises(RuntimeError), at("1999-01-01T00:00:00+00:00"):
        raise RuntimeError
    assert clock.now() == before


def test_nothing_else_in_the_house_asks_for_the_time() -> None:
    asks = re.compile(
        r"timezone\.now|datetime\.(now|utcnow|today)\(|date\.today\(|\btime\.time\(|"
        r"auto_now|functions import .*\bNow\b|localdate\(|localtime\("
    )
    found = [
        f"{path.relative_to(ROOT)}:{number}"
        for folder in ("labplan", "inventory")
        for path in sorted((ROOT / folder).rglob("*.py"))
        for number, line in enumerate(path.read_text().splitlines(), start=1)
        if asks.search(line)
    ]
    own = [place for place in found if place.startswith("labplan/base/clock.py:")]
    assert found == own
    assert len(own) == 1
