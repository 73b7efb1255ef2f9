"""What happens to the plant: wandering, moves, swings, fouling, faults, the laboratory's habits."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Literal

from plant_models.simulators.instruments import FaultSpec

Quantity = Literal[
    "feed_flow", "feed_temperature", "feed_concentration", "coolant_flow", "coolant_temperature"
]
HOUR = 3600.0


@dataclass(frozen=True, slots=True)
class Wander:
    """First-order Gauss-Markov movement from zero: stationary sd and time constant in seconds."""

    quantity: Quantity
    sd: float
    time_constant: float


@dataclass(frozen=True, slots=True)
class Move:
    """A lasting change of a quantity from ``start`` (seconds) on; several add up."""

    quantity: Quantity | Literal["heat_transfer_share"]
    start: float
    size: float

    def at(self, seconds: float) -> float:
        return self.size if seconds >= self.start else 0.0


@dataclass(frozen=True, slots=True)
class Swing:
    """A passing change: half-cosine rise, plateau, half-cosine return. Times in seconds."""

    quantity: Quantity
    start: float
    size: float
    rise: float
    plateau: float

    def at(self, seconds: float) -> float:
        into = seconds - self.start
        end = 2.0 * self.rise + self.plateau
        if not 0.0 < into < end:
            return 0.0
        edge = min(into, end - into)
        return self.size * (0.5 - 0.5 * math.cos(math.pi * min(edge / self.rise, 1.0)))


@dataclass(frozen=True, slots=True)
class Laboratory:
    """Samples at a fixed interval, reported late; one of them may carry a wrong sampling time.

    ``mistaken_sample`` counts from 0; its stamp is ``mistake`` seconds off (negative: too early).
    """

    tag: str = "AL2101"
    first: float = 1800.0
    interval: float = HOUR
    delay: float = 2400.0
    noise_sd: float = 0.01
    resolution: float = 0.001
    mistaken_sample: int | None = None
    mistake: float = 0.0


@dataclass(frozen=True, slots=True)
class Scenario:
    """A whole run of the plant; the same seed gives the same run, bit for bit."""

    seed: int = 1
    wanders: tuple[Wander, ...] = ()
    moves: tuple[Move, ...] = ()
    swings: tuple[Swing, ...] = ()
    faults: tuple[FaultSpec, ...] = ()
    fouling_per_hour: float = 0.0
    """Rise of the jacket's resistance per hour, as a share of the clean one."""
    setpoint: float = 92.4
    automatic: bool = True
    """False: the temperature controller is in manual and the coolant flow moves only by ``moves``."""
    laboratory: Laboratory = field(default_factory=Laboratory)
    sample_time: float = 10.0
    """Seconds between readings; a whole number of integration steps."""

    def shift(self, quantity: str, seconds: float) -> float:
        """Scripted change of a quantity at a time, moves and swings together."""
        scripted = sum(move.at(seconds) for move in self.moves if move.quantity == quantity)
        return scripted + sum(swing.at(seconds) for swing in self.swings if swing.quantity == quantity)

    def heat_transfer_share(self, seconds: float) -> float:
        """UA as a share of the clean jacket's: fouling adds a resistance that grows linearly with time."""
        fouled = 1.0 / (1.0 + self.fouling_per_hour * max(seconds, 0.0) / HOUR)
        return fouled + self.shift("heat_transfer_share", seconds)


NORMAL_WANDERING = (
    Wander("feed_concentration", 0.035, 1.5 * HOUR),
    Wander("feed_temperature", 0.7, 1.0 * HOUR),
    Wander("feed_flow", 0.06, 0.3 * HOUR),
    Wander("coolant_temperature", 0.05, 3.0 * HOUR),
)
"""How the unit moves on an ordinary day."""

NORMAL_MOVES = (
    Move("feed_flow", 0.6 * HOUR, 0.25),
    Move("feed_flow", 3.4 * HOUR, -0.45),
    Move("feed_flow", 5.2 * HOUR, 0.35),
    Move("feed_temperature", 2.4 * HOUR, -0.8),
    Move("feed_temperature", 6.0 * HOUR, 1.0),
)
"""Production's changes of feed rate and preheat in the eight hours of the demonstration."""


@dataclass(frozen=True, slots=True)
class DemoScenario:
    """The demonstration's story. Times in seconds since the start; the drift's rate in kelvin per hour."""

    seed: int = 10
    swing_start: float = 1.5 * HOUR
    swing_size: float = 0.11
    """Of the feed concentration, mol/L."""
    swing_rise: float = 0.4 * HOUR
    swing_plateau: float = 0.9 * HOUR
    drift_tag: str = "TI2101A"
    drift_start: float = 4.0 * HOUR
    drift_rate: float = 0.7
    drift_limit: float = 1.9
    """The largest error that the drift grows to, K."""
    drift_end: float = math.inf
    """Nobody exchanges the thermometer by itself: it stays left out until somebody at the page puts it back."""
    mistaken_sample: int | None = 2
    """The sample after 2 h 30 min, near the swing's peak ..."""
    mistake: float = -2.25 * HOUR
    """... is stamped two and a quarter hours too early."""
    fouling_per_hour: float = 0.001

    def scenario(self) -> Scenario:
        """The run that this story asks for."""
        return Scenario(
            seed=self.seed,
            wanders=NORMAL_WANDERING,
            moves=NORMAL_MOVES,
            swings=(
                Swing(
                    "feed_concentration",
                    self.swing_start,
                    self.swing_size,
                    self.swing_rise,
                    self.swing_plateau,
                ),
            ),
            faults=(
                FaultSpec(
                    self.drift_tag,
                    "drift",
                    self.drift_start,
                    self.drift_limit,
                    self.drift_rate,
                    self.drift_end,
                ),
            )
            if self.drift_rate != 0.0
            else (),
            fouling_per_hour=self.fouling_per_hour,
            laboratory=Laboratory(mistaken_sample=self.mistaken_sample, mistake=self.mistake),
        )
