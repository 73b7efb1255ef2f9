"""When quiet sums mean that a fault is gone, and when only that the filter follows it.

A lasting error of size b leaves b s in a sensor's innovation in the end, s the settled response through the filter. Of a
sum with reference value k and interval h that would climb by (b s - k) a cycle: had the error stayed, the sum would be up
again after h / (b s - k) cycles. Where that is soon, sums that stay down say that the error is gone and the flag clears.
Where b s is near k or below it, they would be down either way: the estimate follows the error. Such a flag stays open
until a step back of the same size is seen, or until a person has looked and enters what was found.

The rule is our own; the settled response is that of :mod:`softsensor.detection.absorption`.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from plant_models.model_scale import scale_at_operating_point
from plant_models.specification import InputSpec, SensorSpec
from plant_models.units import difference_unit
from softsensor.detection.detection_design import DetectionDesign, explanations, sensors_in_use
from softsensor.detection.diagnosis import Likelihoods, Verdict
from softsensor.detection.flags import Episode, Flag, FlagBook, Kind, Note
from softsensor.detection.outcomes import LASTING, SHIFT_KINDS, FollowUp, Moment, cleared
from softsensor.detection.signatures import filter_response, signal_of
from softsensor.detection.single_faults import QUIET
from softsensor.detection.state_of_tests import TestState
from softsensor.estimation.kernel import Floats, Ints

LONGEST_QUIET = 4 * QUIET
"""Where a lasting error would need longer than so many cycles to bring a sum up again, quiet sums say nothing."""
ALLOWANCE = 2.0
"""How much longer than on average a sum may take."""
SETTLED = 16_384
"""Cycles after the onset of an error at which what it leaves is taken as settled."""
SAME = 0.25
"""A step back as large as the error, to within this share, or 3 sd, or the tolerance: the error has gone."""
REMEMBERED_US = 86_400_000_000
"""How long a flag that a person has closed is remembered: the estimate still holds its error, and may step back."""


def settled_response(design: DetectionDesign, tag: str, use: Ints) -> Floats | None:
    """(n_sensors,) what an instrument's unit error leaves in the innovations in the end, in their sd; None for none."""
    suspect = next(
        (item for item in design.suspects if item.name == tag and item.source in ("sensor", "input")), None
    )
    if suspect is None:
        return None
    key = (tag, tuple(int(value) for value in use))
    if key not in design.settled:
        steady, _ = design.table(use)
        signal = signal_of(design.model, design.kernel, replace(suspect, shape="step"), SETTLED)
        left = filter_response(design.kernel, steady.gains, use, signal)[-1]
        design.settled[key] = np.abs(left) / steady.sd
    return design.settled[key]


def quiet_needed(design: DetectionDesign, flag: Flag, use: Ints) -> int | None:
    """Cycles with the sums down that say the error is gone; None where the filter follows it and nothing says so."""
    response = settled_response(design, flag.tag, use)
    if response is None or flag.kind not in SHIFT_KINDS:
        return QUIET
    shift = response * abs(flag.size) * scale_at_operating_point(_instrument(design, flag.tag))
    climb = (shift[:, None] - design.tests.reference)[_watching(design, flag.tag) & (use != 0)]
    interval = design.tests.interval[_watching(design, flag.tag) & (use != 0)]
    rises = climb > 0.0
    if not np.any(rises):
        return None
    soonest = math.ceil(ALLOWANCE * float(np.min(interval[rises] / climb[rises])))
    return None if soonest > LONGEST_QUIET else max(QUIET, soonest)


def _instrument(design: DetectionDesign, tag: str) -> SensorSpec | InputSpec:
    items: tuple[SensorSpec | InputSpec, ...] = (*design.model.spec.sensors, *design.model.spec.inputs)
    return next(item for item in items if item.tag == tag)


def _watching(design: DetectionDesign, tag: str) -> NDArray[np.bool_]:
    """(n_sensors,) whose sums speak about an instrument: a sensor's own; all for an input's."""
    tags = design.model.sensor_tags
    own = np.array([item == tag or tag not in tags for item in tags], dtype=np.bool_)
    watching: NDArray[np.bool_] = own & (design.tests.armed != 0)
    return watching


def settle_flags(design: DetectionDesign, outcome: FollowUp, tests: TestState, moment: Moment) -> FollowUp:
    """Of the flags that a diagnosis has opened and whose sums have stayed down: clear those whose error is gone, keep those
    whose error the estimate follows.
    """
    tags = [item.tag for item in design.model.spec.sensors]
    use = sensors_in_use(design, outcome.book, tests, moment.cycle)
    for flag in outcome.book.open:
        if flag.kind not in LASTING or flag.detected == moment.time or flag.flag in outcome.book.absorbed:
            continue
        if flag.tag in tags and outcome.book.worked_on(tags.index(flag.tag), moment.cycle):
            continue
        own = slice(tags.index(flag.tag), tags.index(flag.tag) + 1) if flag.tag in tags else slice(None)
        since = max(
            int(np.max(tests.down_since[own])),
            moment.cycle - (moment.time - flag.detected) // design.sample_us,
        )
        quiet = 0 if np.any(tests.up[own] != 0) else moment.cycle - since
        if quiet > QUIET:
            outcome = _settle_one(design, outcome, moment, (flag, quiet, use))
    return outcome


def _settle_one(
    design: DetectionDesign, outcome: FollowUp, moment: Moment, seen: tuple[Flag, int, Ints]
) -> FollowUp:
    flag, quiet, use = seen
    left_out = flag.tag in design.model.sensor_tags and outcome.book.excluded(
        design.model.sensor_tags.index(flag.tag), moment.cycle
    )
    needed = QUIET if left_out else quiet_needed(design, flag, use)
    if needed is not None and quiet <= needed:
        return outcome
    if needed is not None:
        outcome = cleared(outcome, flag, moment.time)
        return (
            _back_by_itself(design, outcome, moment, flag) if left_out and design.back_by_itself else outcome
        )
    text = (
        f"{flag.tag}: the sums are down because the estimate follows the error, not because it is gone; the flag stays "
        "until the error is seen to go back or a person enters a finding"
    )
    book = replace(outcome.book, absorbed=(*outcome.book.absorbed, flag.flag))
    return replace(outcome, book=book, notes=(*outcome.notes, Note(moment.time, "error followed", text)))


def _back_by_itself(design: DetectionDesign, outcome: FollowUp, moment: Moment, flag: Flag) -> FollowUp:
    """A sensor left out after its flag counts again from the next cycle on; what a person has left out stays so."""
    sensor, after = design.model.sensor_tags.index(flag.tag), moment.cycle + 1
    book = outcome.book
    ours = [
        item for item in book.exclusions if item.sensor == sensor and not item.by_person and not item.state
    ]
    if not any(item.covers(after) for item in ours):
        return outcome
    ended = tuple(
        replace(item, until=after) if item in ours and item.covers(after) else item
        for item in book.exclusions
    )
    text = f"{flag.tag} agrees with the prediction without it again and is put back, as the model file allows"
    note = Note(moment.time, "put back", text)
    return replace(outcome, book=replace(book, exclusions=ended), notes=(*outcome.notes, note))


def opposed(design: DetectionDesign, book: FlagBook, tests: TestState) -> bool:
    """Is a sum up against the sign of an open flag's error? Then the error may have gone back."""
    for flag in book.open:
        if flag.kind in SHIFT_KINDS and flag.tag in design.model.sensor_tags:
            sensor = design.model.sensor_tags.index(flag.tag)
            against = tests.low[sensor] if flag.size > 0.0 else tests.high[sensor]
            if np.any(against > design.tests.interval[sensor]):
                return True
    return False


def went_back(
    design: DetectionDesign, outcome: FollowUp, moment: Moment, seen: tuple[Verdict, Likelihoods]
) -> FollowUp | None:
    """The outcome where the most probable explanation is that a flagged error has gone back; None where it is not.

    Also of a flag that closed lately: the instrument is right again, and the estimate has yet to follow. Until the sums
    are down that explains what they say.
    """
    verdict, found = seen
    if verdict.best < 0 or 2.0 * verdict.probabilities[0] < 1.0:
        return None
    suspect = explanations(design)[verdict.best]
    if suspect.shape != "step" or suspect.source not in ("sensor", "input"):
        return None
    flag = _latest(outcome.book, suspect.name, moment.time)
    if flag is None or not _same_size(
        design, flag, moment.time, (float(found.size[verdict.best]), float(found.size_sd[verdict.best]))
    ):
        return None
    if flag.cleared is None:
        text = f"{flag.tag}: the error has gone back; it was {_amount(design, flag)} when it was flagged"
        outcome = replace(outcome, notes=(*outcome.notes, Note(moment.time, "error gone back", text)))
        outcome = remembered(cleared(outcome, flag, moment.time), (flag.closed(moment.time),), moment.time)
    episode = Episode(moment.cycle) if outcome.book.episode is None else outcome.book.episode
    weighed = tuple(
        0.0 if tag == flag.tag else value
        for tag, value in zip(design.model.sensor_tags, outcome.book.weighed, strict=False)
    )
    book = replace(outcome.book, episode=replace(episode, explained_at=moment.cycle), weighed=weighed)
    return replace(outcome, book=book)


def _amount(design: DetectionDesign, flag: Flag) -> str:
    return f"{flag.size:.3g} {difference_unit(_instrument(design, flag.tag).unit)}"


def remembered(outcome: FollowUp, flags: tuple[Flag, ...], time: int) -> FollowUp:
    """The outcome with closed flags whose errors the estimate may still hold; what closed long ago is forgotten."""
    kept = [flag for flag in outcome.book.answered if _lately(flag, time)]
    return replace(outcome, book=replace(outcome.book, answered=(*kept, *flags)))


def _lately(flag: Flag, time: int) -> bool:
    return flag.cleared is not None and time - flag.cleared <= REMEMBERED_US


def _latest(book: FlagBook, tag: str, time: int) -> Flag | None:
    """The flag on an instrument that is open or closed lately."""
    lately = (flag for flag in book.answered if _lately(flag, time))
    found = [flag for flag in (*lately, *book.open) if flag.tag == tag and flag.kind in SHIFT_KINDS]
    return found[-1] if found else None


def _same_size(design: DetectionDesign, flag: Flag, time: int, back: tuple[float, float]) -> bool:
    """Is a step (model scale, with its sd) as large as the flag's error, and against it? A drift may have gone on."""
    item = _instrument(design, flag.tag)
    step, sd = (value / scale_at_operating_point(item) for value in back)
    near = max(3.0 * math.hypot(sd, flag.size_sd), SAME * abs(flag.size), getattr(item, "tolerance", 0.0))
    against = -step if flag.size > 0.0 else step
    most = abs(flag.size)
    if flag.kind == "drift" and flag.detected > flag.onset:
        now = time if flag.cleared is None else flag.cleared
        most *= (now - flag.onset) / (flag.detected - flag.onset)
    return against > 0.5 * near and abs(flag.size) - near <= against <= most + near


def flagged_once_more(outcome: FollowUp, newer: Flag, cycle: int) -> tuple[FollowUp, Flag | None]:
    """A followed error is flagged once more: the same one, and the older flag goes on; or a further one, and the newer flag
    takes its place. What is left of an error long followed tells its size, but hardly when it began.
    """
    older = next(
        (flag for flag in outcome.book.open if flag.tag == newer.tag and flag.flag in outcome.book.absorbed),
        None,
    )
    if older is None or newer.kind not in SHIFT_KINDS:
        return outcome, newer
    near = max(3.0 * math.hypot(newer.size_sd, older.size_sd), SAME * abs(older.size))
    if newer.onset <= older.detected or abs(newer.size - older.size) <= near:
        text = f"{newer.tag}: a test is up once more by the same error, now {newer.size:.3g}"
        note = Note(newer.detected, "error seen again", text)
        episode = outcome.book.episode
        seen = None if episode is None else replace(episode, explained_at=cycle)
        book = replace(outcome.book, episode=seen)
        return replace(outcome, book=book, notes=(*outcome.notes, note)), None
    newer = replace(newer, size=older.size + newer.size, size_sd=math.hypot(older.size_sd, newer.size_sd))
    text = (
        f"{newer.tag}: flagged once more, {newer.size:.3g} in all; the newer flag takes the older one's place"
    )
    outcome = replace(outcome, notes=(*outcome.notes, Note(newer.detected, "error has grown", text)))
    return cleared(outcome, older, newer.detected), newer


def explained_lately(book: FlagBook, cycle: int) -> bool:
    """Do the sums still say what an error known already, or one that has gone back, has left in them?"""
    at = -1 if book.episode is None else book.episode.explained_at
    return at >= 0 and cycle - at <= LONGEST_QUIET


def explaining(
    design: DetectionDesign, book: FlagBook, cycle: int, kinds: tuple[Kind, ...]
) -> tuple[Flag, ...]:
    """Open flags of these kinds, on instruments in use, that explain what the tests say."""
    tags = design.model.sensor_tags
    return tuple(
        flag
        for flag in book.open
        if flag.kind in kinds
        and flag.flag not in book.absorbed
        and not (flag.tag in tags and book.excluded(tags.index(flag.tag), cycle))
    )
