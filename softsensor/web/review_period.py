"""The period that a review shows, from its address and back."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime

from plant_models.specification import UnitSpec
from softsensor.records.reader import StoredFlag
from softsensor.service.smoothed_window import LONGEST
from softsensor.web.site import BadForm
from softsensor.web.wording import EPOCH, address, iso

HOUR_US = 3_600_000_000
PERIODS = {"8 h": 8.0, "24 h": 24.0, "7 d": 168.0}
USUAL = 8.0
MOST_HOURS = 87_660.0
"""Ten years: beyond, a number is a slip and no period."""
YEARS = (1970, 2999)
"""Others are slips, and near the ends of the calendar a period has no beginning."""
AROUND = 1.25
"""A flag's period is chosen with at least this share of the flagged time."""


@dataclass(frozen=True)
class Period:
    """``hours`` up to ``until_us``, that time included; UTC microseconds."""

    until_us: int
    hours: float

    @property
    def from_us(self) -> int:
        """Its beginning."""
        return self.until_us - round(self.hours * HOUR_US)

    @property
    def query(self) -> str:
        """The period as the end of an address."""
        return f"?until={address(iso(self.until_us + 999))}&hours={self.hours:g}"

    def moved(self, share: float, newest: int) -> Period:
        """The period so many times its length later, at most up to the newest cycle."""
        return Period(min(self.until_us + round(share * self.hours * HOUR_US), newest), self.hours)

    def of_length(self, hours: float) -> Period:
        """Another length, the same end."""
        return Period(self.until_us, hours)


def period_of(until: str, hours: str, newest: int) -> Period:
    """What an address asks for; without a time, up to the newest cycle.

    :raises BadForm: not a time, or not a number of hours; says what was expected.
    """
    return Period(_moment(until) if until.strip() else newest, _hours(hours))


def longest_hours(spec: UnitSpec) -> float:
    """The longest period that is worked out for a unit."""
    return LONGEST * spec.sample_time / 3600.0


def usual_periods(spec: UnitSpec) -> dict[str, float]:
    """Those of the PERIODS that are not too long, the shortest at least."""
    most = max(longest_hours(spec), min(PERIODS.values()))
    return {label: hours for label, hours in PERIODS.items() if hours <= most}


def period_of_flag(flag: StoredFlag, spec: UnitSpec, newest: int | None) -> Period:
    """The shortest of the usual periods with the flagged time in its middle; of an open flag, up to its detection."""
    end = flag.detected_us if flag.cleared_us is None else flag.cleared_us
    span = max(end - flag.onset_us, 0)
    usual = usual_periods(spec).values()
    hours = next((hours for hours in usual if hours * HOUR_US >= AROUND * span), max(usual))
    spare = max(round(hours * HOUR_US) - span, 0)
    middle = end + spare // 2
    return Period(middle if newest is None else min(middle, max(newest, end)), hours)


def _moment(text: str) -> int:
    try:
        found = datetime.fromisoformat(text.strip())
        aware = found.replace(tzinfo=UTC) if found.tzinfo is None else found.astimezone(UTC)
        if not YEARS[0] <= aware.year <= YEARS[1]:
            raise ValueError(aware)
    except (ValueError, OverflowError):
        raise BadForm(f"until: {text!r}; expected a time in UTC such as 2026-12-01T14:00") from None
    seconds = aware - EPOCH
    return (seconds.days * 86_400 + seconds.seconds) * 1_000_000 + seconds.microseconds


def _hours(text: str) -> float:
    try:
        found = float(text)
    except ValueError:
        found = 0.0
    if not 0.0 < found <= MOST_HOURS:
        raise BadForm(f"hours: {text!r}; expected a number above 0, such as 8, 24 or 168")
    return found
