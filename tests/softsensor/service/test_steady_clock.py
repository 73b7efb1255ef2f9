"""A machine's clock that jumps: what the service goes by, and what it tells."""

from __future__ import annotations

from dataclasses import dataclass, field

import pytest

from softsensor.service.steady_clock import JUMP, PATIENCE, VOTES, SteadyClock

START = 1_796_083_200_000_000
SECOND = 1_000_000
HOUR = 3600 * SECOND


@dataclass
class Machine:
    """A wall clock that can be set, and a count that cannot."""

    steady: int = 77 * SECOND
    ahead: int = START
    clock: SteadyClock = field(init=False)

    def __post_init__(self) -> None:
        self.clock = SteadyClock(lambda: self.steady + self.ahead, lambda: self.steady)

    def passes(self, seconds: float) -> int:
        self.steady += round(seconds * SECOND)
        return self.clock.now()


def test_without_a_jump_it_is_the_machine_s_clock_and_small_steps_are_followed() -> None:
    machine = Machine()
    for step in (1.0, 0.3, 700.0):
        assert machine.passes(step) == machine.steady + machine.ahead
    for _ in range(40):  # a time server that moves the clock by two minutes in steps of three seconds
        machine.ahead += 3 * SECOND
        assert machine.passes(10.0) == machine.steady + machine.ahead
    assert machine.clock.news() == ()


@pytest.mark.parametrize("jump", [-HOUR, HOUR, -60 * SECOND, 10 * SECOND])
def test_a_jump_that_the_readings_do_not_share_is_not_followed(jump: int) -> None:
    machine = Machine()
    before = machine.passes(5.0)
    machine.ahead += jump
    for k in range(1000):
        now = machine.passes(1.0)
        assert now == before + (k + 1) * SECOND
        machine.clock.observe(now - SECOND)
    (text,) = machine.clock.news()
    way = "forward" if jump > 0 else "back"
    assert text.startswith(f"this machine's clock was set {way} by {abs(jump) // SECOND} s")
    machine.ahead -= jump  # set right again
    assert machine.passes(1.0) == before + 1001 * SECOND == machine.steady + machine.ahead
    assert machine.clock.news() == ()


@pytest.mark.parametrize("jump", [-HOUR, HOUR])
def test_a_jump_that_the_readings_share_is_followed(jump: int) -> None:
    machine = Machine()
    machine.passes(5.0)
    machine.ahead += jump
    for _ in range(VOTES):
        assert abs(machine.passes(1.0) - (machine.steady + machine.ahead)) == HOUR
        machine.clock.observe(machine.steady + machine.ahead - SECOND)
    assert machine.passes(1.0) == machine.steady + machine.ahead
    told = machine.clock.news()
    assert "followed" in told[1]
    assert "the plant's readings do" in told[1]
    assert ("cycles wait" in told[1]) == (jump < 0)


def test_without_readings_the_machine_s_clock_is_followed_after_a_while() -> None:
    machine = Machine()
    machine.passes(5.0)
    machine.ahead += HOUR
    machine.clock.observe(START - 50 * HOUR)  # a value that has not changed for days says nothing
    assert machine.passes(PATIENCE - 1.0) == machine.steady + machine.ahead - HOUR
    machine.passes(1.0)
    assert machine.passes(2.0) == machine.steady + machine.ahead
    assert "no reading speaks against it" in machine.clock.news()[1]


def test_two_jumps_are_told_and_the_last_one_counts() -> None:
    machine = Machine()
    machine.passes(5.0)
    for hours in (-1, 3):
        machine.ahead += hours * HOUR
        machine.passes(1.0)
    assert [text.split(";")[0] for text in machine.clock.news()] == [
        "this machine's clock was set back by 3600 s",
        "this machine's clock was set forward by 7200 s",
    ]
    assert machine.clock.seconds_until(machine.clock.now() + 5 * SECOND) == pytest.approx(5.0)
    assert JUMP < 60.0
