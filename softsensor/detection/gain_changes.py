"""Are gains of transfer functions wrong? What that would leave in the innovations, weighed like any other fault.

A relative error d of a path's gain adds d times the path's course c(k) to its output. The course follows from the inputs
as they moved, so its signature has no fixed shape: it is run through the settled filter from every onset looked at. With
the signatures of all P paths over a stretch, whitened, stacked as the columns of V, and the whitened innovations eps::

    g = V' eps,   G = V' V,   d ~ N(0, p^2 I) beforehand
    log likelihood ratio = g' (G + p^-2 I)^-1 g / 2 - ln det(I + p^2 G) / 2

once for each path alone (the diagonal of G) and once for all together. Where the inputs have not moved the readings
say nothing about gains, and a path is not weighed. Before the oldest cycle remembered, inputs are taken as constant.
Source: the Bayes factor of a Gaussian linear model (Bernardo & Smith, Bayesian Theory, 1994, ch. 5).
"""

from __future__ import annotations

import numpy as np
from numba import njit

from plant_models.plant_model import PlantModel
from softsensor.detection.diagnosis import Likelihoods, recent
from softsensor.detection.signatures import Hypothesis, SteadyFilter, filter_response, whiten
from softsensor.estimation.elementary import exponential, logarithm
from softsensor.estimation.kernel import Floats, Ints, Kernel

PRIOR_SD = 0.2
"""Of a relative error of a gain."""
WRONG_BEFORE, WRONG_SINCE = 1.0, 0.05
"""Weight beforehand, where a sensor's own instrument has 1: of gains that were wrong before the oldest cycle looked at,
and of gains that changed later. A model may well be wrong from the first day; a process seldom changes from one hour
to the next. Half of it is for one path into a sensor, half for all paths together."""
LATER_HALVINGS = (0, 1, 3)
"""Onsets looked at: before everything, and the start of what counts, of its later half, of its latest eighth."""
LEAST_SHARE = 1e-3
"""Of the effect of all errors together: a path with less takes no part in it."""
RUN_UP = 300
"""Cycles with constant inputs that go before the oldest one remembered, for errors older than that."""


def path_hypotheses(model: PlantModel, kernel: Kernel) -> tuple[Hypothesis, ...]:
    """One for each path from an input to a sensor; ``index`` is the path's place in the kernel."""
    tags = [item.tag for item in model.spec.inputs]
    return tuple(
        Hypothesis(
            "gain",
            b,
            f"{tags[int(kernel.block_source[b])]} -> {model.spec.sensors[int(kernel.block_row[b])].tag}",
            "step",
            PRIOR_SD,
        )
        for b in range(len(kernel.block_row))
        if kernel.block_row[b] < kernel.n_sensors
    )


@njit(cache=True)
def path_course(kernel: Kernel, b: int, moves: Floats) -> Floats:
    """Output of path ``b`` (cycles,) while the inputs move as in ``moves`` (cycles, n_inputs), oldest first."""
    size, start, at = kernel.block_size[b], kernel.block_state[b], kernel.block_phi[b]
    whole, direct = kernel.block_whole[b], kernel.block_whole[b] + kernel.block_older[b]
    u = moves[:, kernel.block_source[b]]
    x, work, out = np.zeros(size), np.zeros(size), np.zeros(len(u))
    for i in range(size):
        x[i] = kernel.steady[start + i] * u[0]
    for k in range(len(u)):
        total = kernel.block_d[b] * u[max(k - direct, 0)]
        for i in range(size):
            total += kernel.c_in[start + i] * x[i]
        out[k] = total
        recent_u, older_u = u[max(k - whole, 0)], u[max(k - whole - 1, 0)]
        for i in range(size):
            moved = kernel.gamma_recent[start + i] * recent_u + kernel.gamma_older[start + i] * older_u
            for j in range(size):
                moved += kernel.phi[at + i * size + j] * x[j]
            work[i] = moved
        x[:] = work
    return out


@njit(cache=True)
def _ordered(ring: Floats, newest: int, count: int) -> Floats:
    out = np.zeros((count, ring.shape[1]))
    for k in range(count):
        out[k] = ring[(newest - (count - 1 - k)) % ring.shape[0]]
    return out


@njit(cache=True)
def _signatures(
    kernel: Kernel, blocks: Ints, gains: Floats, whitening: Floats, use: Ints, courses: Floats, age: int
) -> Floats:
    """Whitened signatures (P, age * n_sensors) of unit relative errors that began ``age`` cycles ago."""
    n, m = len(blocks), kernel.n_sensors
    out, signal, white = np.zeros((n, age * m)), np.zeros((age, m)), np.zeros((age, m))
    for h in range(n):
        row, first = kernel.block_row[blocks[h]], courses.shape[1] - age
        for k in range(age):
            signal[k, row] = courses[h, first + k]
        whiten(whitening, filter_response(kernel, gains, use, signal), white)
        for k in range(age):
            signal[k, row] = 0.0
            for i in range(m):
                out[h, k * m + i] = white[k, i]
    return out


@njit(cache=True)
def normal_equations(V: Floats, eps: Floats, whole: Ints) -> tuple[Floats, Floats]:
    """G = V V' (P, P) and g = V eps (P,) over the cycles that are whole; V (P, age * m), eps (age, m)."""
    n, m = len(V), eps.shape[1]
    G, g = np.zeros((n, n)), np.zeros(n)
    for a in range(n):
        for b in range(a + 1):
            total = 0.0
            for k in range(len(eps)):
                if whole[k] != 0:
                    for i in range(m):
                        total += V[a, k * m + i] * V[b, k * m + i]
            G[a, b] = total
            G[b, a] = total
        total = 0.0
        for k in range(len(eps)):
            if whole[k] != 0:
                for i in range(m):
                    total += V[a, k * m + i] * eps[k, i]
        g[a] = total
    return G, g


@njit(cache=True)
def evidence_of_all(G: Floats, g: Floats, prior_sd: float) -> tuple[float, Floats]:
    """Log likelihood ratio with all errors free, and their means afterwards (P,), by Cholesky of I + p^2 G."""
    n, p2 = len(g), prior_sd * prior_sd
    L, z, mean = np.zeros((n, n)), np.zeros(n), np.zeros(n)
    log_root = 0.0
    for i in range(n):
        for j in range(i + 1):
            total = p2 * G[i, j] + (1.0 if i == j else 0.0)
            for k in range(j):
                total -= L[i, k] * L[j, k]
            L[i, j] = np.sqrt(total) if i == j else total / L[j, j]
        log_root += logarithm(L[i, i])
        total = g[i]
        for k in range(i):
            total -= L[i, k] * z[k]
        z[i] = total / L[i, i]
    explained = 0.0
    for i in range(n - 1, -1, -1):
        explained += z[i] * z[i]
        total = z[i]
        for k in range(i + 1, n):
            total -= L[k, i] * mean[k]
        mean[i] = total / L[i, i]
    for i in range(n):
        mean[i] *= p2
    return 0.5 * p2 * explained - log_root, mean


@njit(cache=True)
def _add_log(one: float, other: float) -> float:
    """ln(e^one + e^other)."""
    top, low = max(one, other), min(one, other)
    return top if low < top - 700.0 else top + logarithm(1.0 + exponential(low - top))


@njit(cache=True)
def _weigh(
    kernel: Kernel,
    blocks: Ints,
    shares: Floats,
    gains: Floats,
    whitening: Floats,
    use: Ints,
    rings: tuple[Floats, Floats],
    newest: int,
    remembered: int,
    ages: Ints,
) -> Likelihoods:
    n, count, precision = len(blocks), ages[0], 1.0 / (PRIOR_SD * PRIOR_SD)
    eps, whole = np.zeros((count, kernel.n_sensors)), np.ones(count, dtype=np.int64)
    recent(
        rings[0], newest, whitening, use, remembered, eps[count - remembered :], whole[count - remembered :]
    )
    whole[: count - ages[1]] = 0
    moves, courses = np.zeros((count, kernel.n_inputs)), np.zeros((n, count))
    moves[count - remembered :] = _ordered(rings[1], newest, remembered)
    for k in range(count - remembered):
        moves[k] = moves[count - remembered]
    for h in range(n):
        courses[h] = path_course(kernel, blocks[h], moves)
    evidence, best_age, best = np.full(n, -1e300), np.zeros(n, dtype=np.int64), np.full(n, -1e300)
    size, size_sd = np.zeros(n), np.zeros(n)
    for a in range(len(ages)):
        age, first = ages[a], count - ages[a]
        V = _signatures(kernel, blocks, gains, whitening, use, courses, age)
        G, g = normal_equations(V, eps[first:], whole[first:])
        weight = logarithm(0.5 * (WRONG_BEFORE if a == 0 else WRONG_SINCE / (len(ages) - 1)))
        for h in range(n):
            D = G[h, h] + precision
            if G[h, h] < precision:
                continue
            score = 0.5 * g[h] * g[h] / D - 0.5 * logarithm(D / precision) + weight
            evidence[h] = _add_log(evidence[h], score + logarithm(shares[h]))
            if score > best[h]:
                best[h], best_age[h] = score, age
                size[h], size_sd[h] = g[h] / D, np.sqrt(1.0 / D)
        together, mean = evidence_of_all(G, g, PRIOR_SD)
        effect = 0.0
        for h in range(n):
            effect += mean[h] * mean[h] * G[h, h]
        for h in range(n):
            share = mean[h] * mean[h] * G[h, h] / effect if effect > 0.0 else 0.0
            if G[h, h] >= precision and share > LEAST_SHARE:
                evidence[h] = _add_log(evidence[h], together + weight + logarithm(share))
    return Likelihoods(evidence, best_age, size, size_sd)


def gain_likelihoods(
    kernel: Kernel,
    paths: tuple[Hypothesis, ...],
    steady: SteadyFilter,
    use: Ints,
    rings: tuple[Floats, Floats],
    newest: int,
    available: int,
    suspect: Hypothesis | None = None,
) -> Likelihoods:
    """Score every path over a few onsets. The evidence of all together goes to the paths by their effect, mean^2 D.

    :param rings: innovations (window, n_sensors) and inputs as deviations (window, n_inputs).
    :param available: cycles up to ``newest`` that count.
    :param suspect: weigh only the paths into this sensor, or from this input; the others get no evidence.
    """
    blocks = np.array([path.index for path in paths], dtype=np.int64)
    chosen = np.flatnonzero(concerned(kernel, blocks, suspect))
    remembered = min(newest + 1, rings[0].shape[0])
    halved = [available >> halving for halving in LATER_HALVINGS if available >> halving > 0]
    ages = np.array([remembered + RUN_UP, *halved], dtype=np.int64)
    into = np.bincount(kernel.block_row[blocks], minlength=kernel.n_sensors)[kernel.block_row[blocks]]
    found = Likelihoods(
        np.full(len(paths), -1e300),
        np.zeros(len(paths), dtype=np.int64),
        np.zeros(len(paths)),
        np.zeros(len(paths)),
    )
    if not chosen.size:
        return found
    weighed = _weigh(
        kernel,
        blocks[chosen],
        1.0 / into[chosen],
        steady.gains,
        steady.whitening,
        use,
        rings,
        newest,
        remembered,
        ages,
    )
    weighed = weighed._replace(age=np.minimum(weighed.age, remembered))
    for part, whole in zip(weighed, found, strict=True):
        whole[chosen] = part
    return found


def concerned(kernel: Kernel, blocks: Ints, suspect: Hypothesis | None) -> Ints:
    """(P,) 1 for a path into the suspected sensor or from the suspected input; all where neither is suspected."""
    if suspect is not None and suspect.source == "sensor":
        return np.asarray(kernel.block_row[blocks] == suspect.index, dtype=np.int64)
    if suspect is not None and suspect.source == "input":
        return np.asarray(kernel.block_source[blocks] == suspect.index, dtype=np.int64)
    return np.ones(len(blocks), dtype=np.int64)
