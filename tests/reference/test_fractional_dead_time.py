"""The hold with fractional dead time, to the printed digits of worked examples.

Theirs: x' = -a x + b u(t - tau), tau = (d - 1) h + tau', 0 < tau' <= h; x+ = phi x + G0 u(k-d+1) + G1 u(k-d).
Ours: tau = (m + f) h, 0 <= f < 1. They are the same but for a whole tau, where theirs has tau' = h, G0 = 0.
"""

from __future__ import annotations

import numpy as np
import pytest

from plant_models.discretisation import discretise, held_matrices
from plant_models.plant_model import DiscretePath
from plant_models.specification import PathSpec

MINUTE = 60.0


def scaled(path: DiscretePath) -> tuple[float, float, float]:
    """phi, G0, G1 of a first-order path, with the output itself as its state."""
    (c,) = path.c
    return float(path.phi[0, 0]), float(c * path.gamma_recent[0]), float(c * path.gamma_older[0])


def test_the_paper_machine() -> None:
    """x' = -x + u(t - 2.6), h = 1: phi 0.37, G0 0.33, G1 0.30.

    Astrom & Wittenmark, Computer-Controlled Systems, paper-machine example: MEMORY; eight digits: COMPUTED.
    """
    path = discretise(PathSpec("U", "Y", 1.0, (1.0,), (), 2.6), 0, 0, 1.0)
    assert path.whole_delays == 2
    assert path.fraction == pytest.approx(0.6, abs=1e-15)
    assert [round(value, 2) for value in scaled(path)] == [0.37, 0.33, 0.30]
    assert [round(value, 8) for value in scaled(path)] == [0.36787944, 0.32967995, 0.30244060]


def test_a_lag_with_one_and_a_half_samples_over() -> None:
    """3/(s + 3) e^{-1.95 s}, h = 0.1: z^-20 (0.1393 z + 0.1199)/(z - 0.7408).

    Four digits: READ in a public worked example; eight digits: COMPUTED.
    """
    late = PathSpec("U", "Y", dead_time=1.95, numerator=(3.0,), denominator=(1.0, 3.0))
    path = discretise(late, 0, 0, 0.1)
    assert path.whole_delays == 19
    phi, recent, older = scaled(path)
    assert [round(value, 4) for value in (recent, older, phi)] == [0.1393, 0.1199, 0.7408]
    assert [round(value, 8) for value in (recent, older, phi)] == [0.13929202, 0.11988976, 0.74081822]


def test_the_double_integrator() -> None:
    """x1' = x2, x2' = u(t - 0.3), h = 1: G1 = [0.255, 0.3], G0 = [0.245, 0.7]. Form as above, COMPUTED."""
    A, B = np.array([[0.0, 1.0], [0.0, 0.0]]), np.array([0.0, 1.0])
    held = held_matrices(A, B, 1.0, 0.3)
    assert held.phi.tolist() == [[1.0, 1.0], [0.0, 1.0]]
    assert held.gamma_older == pytest.approx([0.255, 0.3], abs=1e-15)
    assert held.gamma_recent == pytest.approx([0.245, 0.7], abs=1e-15)


@pytest.mark.parametrize(
    ("gain", "lag", "dead_time", "h", "d", "expected"),
    [
        (12.8, 16.7, 1.0, 1.0, 2, (0.94187733, 0.74397022, 0.0)),
        (3.8, 14.9, 8.1, 1.0, 9, (0.93508851, 0.22273557, 0.02392810)),
        (4.9, 13.2, 3.4, 1.0, 4, (0.92704092, 0.21774112, 0.13975839)),
        (3.8, 14.9, 8.1, 2.0, 5, (0.87439052, 0.45494115, 0.02237489)),
        (4.9, 13.2, 3.4, 2.0, 2, (0.85940486, 0.21774112, 0.47117506)),
    ],
    ids=["R to xD, 1 min", "F to xD, 1 min", "F to xB, 1 min", "F to xD, 2 min", "F to xB, 2 min"],
)
def test_wood_and_berry_s_column(
    gain: float, lag: float, dead_time: float, h: float, d: int, expected: tuple[float, float, float]
) -> None:
    """Wood & Berry (1973), Chem. Eng. Sci. 28:1707-1717: transfer functions READ, values COMPUTED."""
    path = discretise(PathSpec("U", "Y", gain, (lag * MINUTE,), (), dead_time * MINUTE), 0, 0, h * MINUTE)
    assert path.whole_delays == d - 1
    assert [round(value, 8) for value in scaled(path)] == list(expected)
