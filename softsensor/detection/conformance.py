"""How probable is it that a sensor's bias lies beyond its tolerance? Kept up to date all the time, at a bounded cost.

The likelihood sums of :mod:`softsensor.detection.diagnosis` are carried forward for a handful of possible onsets: with
v(j) a hypothesis's whitened signature, averaged over block j after the onset, and eps the whitened innovations of that
block::

    N <- N + v(j)' sum eps,     D <- D + (whole cycles) v(j)' v(j)

Every BLOCK cycles a new possible onset begins; of those that are kept the most crowded one, by the ratio of ages, is
given up. With a prior rate of faults, an onset stands for the time between its neighbours, and::

    P(nothing) ~ 1,  P(h, onset) ~ rate * time * (1 + D p^2)^-1/2 exp(N^2 / (2 (D + p^-2)))

The probability is the sum, over a sensor's own hypotheses and their onsets, of the share of each whose size now, normal
with mean N / (D + p^-2) and variance 1 / (D + p^-2), lies beyond the tolerance. Of a sensor that is left out,
the mean difference m from the prediction without it, over n cycles, says it: the bias is normal with mean m and variance
S - r + r / n, S the innovation's variance, r the noise's. The measure is the conformance
probability of JCGM 106:2012 (its complement); the recursion is Willsky & Jones (1976).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from softsensor.detection.signatures import Hypothesis
from softsensor.estimation.compiling import allocating, inlined, inner, uncounted
from softsensor.estimation.elementary import error_function, exponential, logarithm
from softsensor.estimation.kernel import Floats, Ints

BLOCK = 16
LOOK_EVERY_BLOCKS = 8
FAULTS_PER_YEAR = 1.0
"""Per instrument, beforehand; a disturbance steps out of what its model allows MOVES_PER_YEAR times. Common practice, no
source."""
MOVES_PER_YEAR = 12.0
BEFORE_DAYS = 18.0
"""The first onset stands for so much time besides its own: about one instrument in twenty is wrong when watching begins."""
LATELY = 64
"""Cycles over which a sensor that is not in use is compared with the prediction without it."""
NEGLIGIBLE = -30.0
YEAR_S = 365.25 * 86400.0


class Standing(NamedTuple):
    """What the recursion needs with some sensors in use.

    table (blocks, n_sensors, H): whitened signatures averaged over each block, zero for a sensor not in use; whitening
    and use as in the diagnosis; ramp (H,): 1 where the shape is a ramp; sensor (H,): the sensor a hypothesis is about,
    -1 for another; prior_sd (H,): of a step's size, or of what a ramp has reached; log_rate (H,): log of the prior rate
    a cycle; before: cycles that the first onset stands for besides its own; tolerance (n_sensors,).
    """

    table: Floats
    whitening: Floats
    use: Ints
    ramp: Ints
    sensor: Ints
    prior_sd: Floats
    log_rate: Floats
    before: float
    tolerance: Floats


class Seen(NamedTuple):
    """A cycle's innovations (n_sensors,) and their sd, the sensors' noise sd, and the ring of the latest innovations
    (window, n_sensors)."""

    innovation: Floats
    sd: Floats
    noise_sd: Floats
    ring: Floats


class Evidence(NamedTuple):
    """What is carried: block (n_sensors + 1,): sum of whitened innovations and whole cycles of the block under way;
    onset (ONSETS,): first cycles, ascending, -1 where none; N, D (ONSETS, H); beyond (n_sensors,): the probability."""

    block: Floats
    onset: Ints
    N: Floats
    D: Floats
    beyond: Floats


def block_table(signatures: Floats) -> Floats:
    """Signatures (H, window, n_sensors) averaged over blocks, as (blocks, n_sensors, H)."""
    h, window, m = signatures.shape
    blocks = signatures[:, : window // BLOCK * BLOCK].reshape(h, window // BLOCK, BLOCK, m)
    mean = np.zeros((h, window // BLOCK, m))
    for k in range(BLOCK):
        mean += blocks[:, :, k]
    return np.ascontiguousarray(np.transpose(mean / BLOCK, (1, 2, 0)))


def standing(
    suspects: tuple[Hypothesis, ...],
    signatures: Floats,
    whitening: Floats,
    use: Ints,
    sample_time: float,
    tolerance: Floats,
) -> Standing:
    """Everything the recursion needs, from the diagnosis's table of signatures."""
    rates = [
        (MOVES_PER_YEAR if item.source == "disturbance" else FAULTS_PER_YEAR) * sample_time / YEAR_S
        for item in suspects
    ]
    step_sd = {item.name: item.prior_sd for item in suspects if item.shape == "step"}
    return Standing(
        block_table(signatures),
        whitening,
        use,
        np.array([int(item.shape == "ramp") for item in suspects], dtype=np.int64),
        np.array([item.index if item.source == "sensor" else -1 for item in suspects], dtype=np.int64),
        np.array([step_sd[item.name] for item in suspects]),
        np.array([logarithm(0.5 * rate) for rate in rates]),
        BEFORE_DAYS * 86400.0 / sample_time,
        tolerance,
    )


@inner
def _signature(table: Floats, ramp: Ints, j: int, i: int, h: int) -> float:
    """Of block j for sensor i; beyond the table a step stays as it was, a ramp goes on."""
    last = table.shape[0] - 1
    if j <= last:
        return float(table[j, i, h])
    if ramp[h] == 0:
        return float(table[last, i, h])
    return float(table[last, i, h] + (j - last) * (table[last, i, h] - table[last - 1, i, h]))


@inner
def _add_block(known: Standing, evidence: Evidence, first: int) -> None:
    """The block that began at cycle ``first`` into the sums of every onset."""
    m, last = len(known.tolerance), known.table.shape[0] - 1
    whole, count = evidence.block[m], known.table.shape[2]
    for c in range(len(evidence.onset)):
        if evidence.onset[c] < 0:
            continue
        j = (first - evidence.onset[c]) // BLOCK
        N, D = evidence.N[c], evidence.D[c]
        for i in range(m):
            total = evidence.block[i]
            if j <= last:
                row = known.table[j, i]
                for h in range(count):
                    N[h] += row[h] * total
                    D[h] += whole * row[h] * row[h]
            else:
                for h in range(count):
                    value = _signature(known.table, known.ramp, j, i, h)
                    N[h] += value * total
                    D[h] += whole * value * value


@allocating
def _make_room(evidence: Evidence) -> int:
    """The first free place; gives up the onset that its neighbours can best stand for. The first one stays."""
    size = len(evidence.onset)
    if evidence.onset[size - 1] < 0:
        for c in range(size):
            if evidence.onset[c] < 0:
                return c
    newest, crowded, least = evidence.onset[size - 1] + BLOCK, 1, 1e300
    for c in range(1, size - 1):
        before, after = newest - evidence.onset[c - 1], newest - evidence.onset[c + 1]
        if before / after < least:
            crowded, least = c, before / after
    for c in range(crowded, size - 1):
        evidence.onset[c] = evidence.onset[c + 1]
        evidence.N[c] = evidence.N[c + 1]
        evidence.D[c] = evidence.D[c + 1]
    return size - 1


@allocating
def _begin_onset(evidence: Evidence, cycle: int) -> None:
    place = _make_room(evidence)
    evidence.onset[place] = cycle
    evidence.N[place] = 0.0
    evidence.D[place] = 0.0


@uncounted
def upper_tail(x: float) -> float:
    """P(Z > x) of a standard normal variable."""
    half = 0.5 * (1.0 - error_function(abs(x) * 0.7071067811865476))
    return half if x >= 0.0 else 1.0 - half


@inner
def _span(evidence: Evidence, c: int, now: int) -> float:
    """Cycles that an onset stands for: half-way to its neighbours."""
    onset = evidence.onset
    later = onset[c + 1] if c + 1 < len(onset) and onset[c + 1] >= 0 else now
    earlier = onset[c - 1] if c > 0 else onset[c]
    return float(max(0.5 * (later - earlier), 1.0))


@allocating
def weigh_onsets(known: Standing, evidence: Evidence, now: int) -> None:
    """Bring ``beyond`` up to date at cycle ``now``."""
    size, hypotheses, m = len(evidence.onset), known.table.shape[2], len(known.tolerance)
    score = np.full((size, hypotheses), NEGLIGIBLE * 100.0)
    top = 0.0
    for c in range(size):
        if evidence.onset[c] < 0:
            continue
        span = _span(evidence, c, now) + (known.before if c == 0 else 0.0)
        log_span, age = logarithm(span), float(now - evidence.onset[c])
        for h in range(hypotheses):
            scale = known.prior_sd[h] / age if known.ramp[h] != 0 else known.prior_sd[h]
            precision = 1.0 / (scale * scale)
            N, D = evidence.N[c, h], evidence.D[c, h]
            quadratic = 0.5 * N * N / (D + precision) + log_span + known.log_rate[h]
            if quadratic < top + NEGLIGIBLE:
                continue
            score[c, h] = quadratic - 0.5 * logarithm(1.0 + D / precision)
            top = max(top, score[c, h])
    total = exponential(-top)
    beyond = np.zeros(m)
    for c in range(size):
        for h in range(hypotheses):
            if score[c, h] < top + NEGLIGIBLE:
                continue
            weight = exponential(score[c, h] - top)
            total += weight
            i = known.sensor[h]
            if i < 0 or known.use[i] == 0:
                continue
            age = float(now - evidence.onset[c])
            reach = age if known.ramp[h] != 0 else 1.0
            scale = known.prior_sd[h] / reach
            D = evidence.D[c, h] + 1.0 / (scale * scale)
            mean, sd = evidence.N[c, h] / D * reach, np.sqrt(1.0 / D) * reach
            limit = known.tolerance[i]
            beyond[i] += weight * (upper_tail((limit - mean) / sd) + upper_tail((limit + mean) / sd))
    for i in range(m):
        evidence.beyond[i] = beyond[i] / total if known.use[i] != 0 else np.nan


@inlined
def _whiten_into(known: Standing, innovation: Floats, block: Floats) -> None:
    m = len(known.tolerance)
    for i in range(m):
        if known.use[i] != 0 and innovation[i] != innovation[i]:
            return
    for i in range(m):
        if known.use[i] != 0:
            total = 0.0
            for j in range(i + 1):
                if known.use[j] != 0:
                    total += known.whitening[i, j] * innovation[j]
            block[i] += total
    block[m] += 1.0


@allocating
def _forget(evidence: Evidence) -> None:
    evidence.onset[:] = -1
    evidence.N[:] = 0.0
    evidence.D[:] = 0.0
    evidence.block[:] = 0.0
    evidence.beyond[:] = np.nan


@inner
def _weigh_left_out(known: Standing, evidence: Evidence, seen: Seen, cycle: int) -> None:
    """A sensor that is not in use: its mean difference from the prediction without it, over the last LATELY cycles."""
    window = seen.ring.shape[0]
    for i in range(len(known.tolerance)):
        if known.use[i] != 0:
            continue
        total, count = 0.0, 0
        for back in range(min(LATELY, window, cycle + 1)):
            value = seen.ring[(cycle - back) % window, i]
            if value == value:
                total += value
                count += 1
        if count == 0:
            continue
        noise = seen.noise_sd[i] * seen.noise_sd[i]
        sd = np.sqrt(max(seen.sd[i] * seen.sd[i] - noise, 0.0) + noise / count)
        mean, limit = total / count, known.tolerance[i]
        evidence.beyond[i] = upper_tail((limit - mean) / sd) + upper_tail((limit + mean) / sd)


@inlined
def follow_cycle(
    known: Standing, evidence: Evidence, seen: Seen, cycle: int, valid_from: int, resting: bool
) -> None:
    """One cycle. What comes before ``valid_from`` and while the tests rest does not count; a rest forgets everything."""
    if resting or cycle < valid_from:
        if evidence.onset[0] >= 0:
            _forget(evidence)
        return
    place = cycle % BLOCK
    if place == 0:
        _begin_onset(evidence, cycle)
    elif evidence.onset[0] < 0:
        return
    _whiten_into(known, seen.innovation, evidence.block)
    if place == BLOCK - 1:
        _add_block(known, evidence, cycle - (BLOCK - 1))
        for i in range(len(evidence.block)):
            evidence.block[i] = 0.0
        if (cycle // BLOCK) % LOOK_EVERY_BLOCKS == LOOK_EVERY_BLOCKS - 1:
            weigh_onsets(known, evidence, cycle + 1)
            _weigh_left_out(known, evidence, seen, cycle)


@uncounted
def follow_conformance(
    known: Standing, evidence: Evidence, seen: Seen, cycle: int, valid_from: int, resting: bool
) -> None:
    """:func:`follow_cycle`, to be called from Python."""
    follow_cycle(known, evidence, seen, cycle, valid_from, resting)
