"""What is usually behind a fault of an instrument, and how it is checked, by kind of fault and by ISA-5.1 first letter."""

from __future__ import annotations

FIRST_LETTERS = {
    "A": "analysis",
    "D": "density",
    "F": "flow",
    "L": "level",
    "P": "pressure",
    "T": "temperature",
}
"""ISA-5.1, first letters of a tag (D is a user's choice there)."""

CAUSES = {
    "bias": ("a range or zero that was changed in transmitter or control system", "a wrong adjustment"),
    "drift": (
        "ageing of the element or its electronics",
        "build-up or corrosion where it touches the process",
    ),
    "stuck": (
        "the transmitter or an input card holds its last value",
        "a value entered by hand or forced in the control system",
    ),
    "noisy": ("a loose terminal or broken shield", "electrical interference, a changed earth"),
    "spike": (
        "a loose terminal",
        "interference from switching nearby",
        "a reset of transmitter or input card",
    ),
    "lost": (
        "broken wire or blown fuse",
        "loss of supply or of communication",
        "the reading left its failure limits",
    ),
}
LETTER_CAUSES = {
    ("T", "bias"): (
        "wrong thermocouple type or extension wire, wrong cold-junction compensation",
        "element not at the bottom of its thermowell",
    ),
    ("T", "drift"): (
        "thermocouple ageing at temperature",
        "moisture in a resistance element",
        "fouling or a leak of the thermowell",
    ),
    ("T", "stuck"): ("open element held by burn-out setting",),
    ("P", "bias"): ("liquid head in a wet leg", "zero shifted by overpressure or mounting position"),
    ("P", "drift"): ("leaking or slowly plugging impulse line", "loss of fill fluid in a remote seal"),
    ("P", "stuck"): ("impulse line plugged or frozen, its valve closed",),
    ("F", "bias"): (
        "gas in a liquid line or liquid in a gas line",
        "wrong density or pressure compensation",
        "low-flow cut-off",
    ),
    ("F", "drift"): (
        "wear or build-up at the orifice plate",
        "leak at the manifold or in an impulse line",
        "coating in a magnetic meter",
    ),
    ("F", "stuck"): ("impulse line plugged or frozen, equalising valve open",),
    ("L", "bias"): (
        "density other than that of the calibration",
        "condensate in the dry leg, or a wet leg run dry",
    ),
    ("L", "drift"): ("build-up on float, probe or displacer", "slow plugging of a nozzle"),
    ("L", "stuck"): ("float or displacer jammed", "nozzle plugged, its valve closed"),
    ("A", "bias"): ("calibration against a wrong standard", "sample taken from another stream or phase"),
    ("A", "drift"): ("ageing of column, cell, lamp or electrode", "fouling of the sample system"),
    ("A", "stuck"): (
        "sample flow stopped: the same sample is measured again",
        "analyser holds while it calibrates",
    ),
    ("A", "lost"): ("analyser in fault, in calibration or out of sample",),
}
CHECKS = {
    "T": "Compare with a reference thermometer beside it, or take the element out and compare in a block calibrator at "
    "the reference points; check the transmitter with a simulator.",
    "P": "Close and equalise or vent as the procedure says, check zero, then apply the reference points with a pressure "
    "calibrator. Blow through the impulse lines only where the procedure allows it.",
    "F": "Check zero at no flow with equalised manifold, then apply the differential pressures of the reference points; "
    "compare with a clamp-on meter or a tank's change of level over a known time.",
    "L": "Compare with the gauge glass or a dip, check zero, then apply the heads of the reference points.",
    "A": "Measure a certified reference sample near each reference point; check sample flow, pressure, filter and lag. "
    "Have a laboratory sample taken at the same time.",
    "D": "Measure a sample of known density near each reference point; compare with a laboratory sample.",
}
ANY_CHECK = "Apply known values at the reference points and compare."
LAST_LOOK = {
    "stuck": "First look whether the value moves at all in transmitter and control system.",
    "spike": "First look at terminals, shields and the times at which something nearby is switched.",
    "noisy": "First look at terminals, shields and damping.",
    "lost": "First look at supply, wiring and communication; calibrate once it reads again.",
}


def causes_of(tag: str, kind: str) -> tuple[str, ...]:
    """Likely causes, the instrument's own first.

    >>> causes_of("TI2101A", "drift")[0], causes_of("XI1", "lost")[0]
    ('thermocouple ageing at temperature', 'broken wire or blown fuse')
    """
    return LETTER_CAUSES.get((tag[:1].upper(), kind), ()) + CAUSES.get(kind, ())


def check_of(tag: str, kind: str) -> str:
    """The check to begin with."""
    check = CHECKS.get(tag[:1].upper(), ANY_CHECK)
    return f"{LAST_LOOK[kind]} {check}" if kind in LAST_LOOK else check
