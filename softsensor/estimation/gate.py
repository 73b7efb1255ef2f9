"""The gate before the correction, compiled: one impossible reading moves nothing, a lasting move is followed.

A reading whose innovation, against the prediction before any reading of its cycle, is beyond ``gate`` standard
deviations is not used. A row of FOLLOWED readings of one sensor beyond half of that, all to the same side, is no accident:
from its last one on they are used, until a reading ends the row. A reading that is missing or left out of the estimate
neither counts nor ends a row. In the FOLLOWED cycles after a sensor began to be followed all gates are open.

A Gaussian innovation is beyond 8 standard deviations once in 8e14: data from a right model never meet the gate, so that
the estimate is the Kalman filter's own, to the last bit. Two readings are the longest glitch of an instrument or a
connection that is common; a longer row would cost a true step more cycles of delay. Rows are counted at half the gate and
gates open together, because a faulty sensor that is followed moves the prediction of healthy ones: kept out just then, or
again and again near their own gate, they would lose the prediction to the faulty one, and jump like spikes themselves (the
fractionator, 30 sd on one of two temperatures).
"""

from __future__ import annotations

from softsensor.estimation.compiling import uncounted
from softsensor.estimation.kernel import Floats, Ints

FOLLOWED = 3
"""The reading of a row from which on the sensor is followed."""
COUNTED = 0.5
"""Share of the gate beyond which a reading counts in a row."""


@uncounted
def gates_open(streak: Ints) -> bool:
    """Has a sensor begun to be followed in the last FOLLOWED cycles? To be asked before a cycle's first reading."""
    for i in range(len(streak)):  # noqa: SIM110 (compiled)
        if FOLLOWED <= abs(streak[i]) < 2 * FOLLOWED:
            return True
    return False


@uncounted
def passes(gate: Floats, streak: Ints, i: int, innovation: float, sd: float) -> bool:
    """Is the reading of sensor i used, where the gates are not open? ``streak`` (n_sensors,) is brought up to date: the
    length of the row, twice FOLLOWED at most, with the sign of its side.
    """
    limit, row = gate[i] * sd, streak[i]
    if innovation > COUNTED * limit:
        row = min(row + 1, 2 * FOLLOWED) if row > 0 else 1
    elif innovation < -COUNTED * limit:
        row = max(row - 1, -2 * FOLLOWED) if row < 0 else -1
    else:
        row = 0
    streak[i] = row
    return abs(row) >= FOLLOWED or not abs(innovation) > limit
