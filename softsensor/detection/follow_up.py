"""What follows when a test has news: open a flag, name a sensor, say that a disturbance moved, clear what has passed."""

from __future__ import annotations

from dataclasses import replace
from zlib import crc32

import numpy as np

from softsensor.detection import state_of_tests as told
from softsensor.detection.absorbed_faults import (
    explained_lately,
    explaining,
    flagged_once_more,
    settle_flags,
    went_back,
)
from softsensor.detection.detection_design import DetectionDesign, explanations, look, sensors_in_use
from softsensor.detection.diagnosis import (
    NAMING_RATIO,
    Likelihoods,
    Verdict,
    named,
)
from softsensor.detection.flag_sizes import present_size, size_in_unit
from softsensor.detection.flagged_bias import AT_FAULT, beyond_by_look
from softsensor.detection.flags import (
    Episode,
    Exclusion,
    Flag,
    FlagBook,
    Kind,
    Note,
    RestSpell,
    flag_name,
    time_words,
)
from softsensor.detection.onsets import NO_ACCOUNT, Account, account_of
from softsensor.detection.outcomes import EXPLAINING, PATIENCE, FollowUp, Moment, opened
from softsensor.detection.single_faults import single_faults
from softsensor.detection.state_of_tests import TestState
from softsensor.detection.while_flagged import look_again
from softsensor.estimation.kernel import Ints

UNSTEADY = "start in a moving plant"


def follow_up(design: DetectionDesign, book: FlagBook, tests: TestState, moment: Moment) -> FollowUp:
    """Deal with all news of one cycle; ``tests`` is a work array and may be restarted here."""
    outcome = _say_settling(_begin(design, FollowUp(book), tests, moment), moment)
    for sensor in range(design.kernel.n_sensors):
        outcome = single_faults(design, outcome, tests, moment, sensor)
    if not book.resting(moment.cycle):
        outcome = settle_flags(design, outcome, tests, moment)
    if design.armed:
        outcome = _diagnose(design, outcome, tests, moment)
    followed = outcome.book.absorbed
    ends_by_itself = all(flag.kind == "lost" or flag.flag in followed for flag in outcome.book.open)
    tests.watch[0] = int(not ends_by_itself or outcome.book.episode is not None)
    return outcome


def _say_settling(outcome: FollowUp, moment: Moment) -> FollowUp:
    """Every rest of the tests is on record, with its beginning and its end."""
    settling = outcome.book.settling
    if moment.news & told.SETTLING:
        text = "an input is missing or too old: the tests of innovations rest, the estimates are Uncertain"
        return _rested(outcome, RestSpell("inputs missing", "", moment.time, None, ""), text, moment.time)
    if moment.news & told.SETTLED and settling is not None:
        text = "inputs have been there long enough again: the tests of innovations go on"
        if settling.cause == UNSTEADY:
            text = "what the inputs did before the run began is forgotten: the tests of innovations begin"
        return _rested(outcome, replace(settling, until=moment.time), text, moment.time)
    return outcome


def _rested(outcome: FollowUp, spell: RestSpell, text: str, time: int) -> FollowUp:
    book = replace(outcome.book, settling=spell if spell.until is None or spell.until > time else None)
    note = Note(time, "rest", text)
    return replace(outcome, book=book, notes=(*outcome.notes, note), rests=(*outcome.rests, spell))


def _begin(design: DetectionDesign, outcome: FollowUp, tests: TestState, moment: Moment) -> FollowUp:
    """A test that goes up early on a sum that climbed from the beginning: the plant was moving when the run began.

    The tests of innovations then rest until the past of the inputs is forgotten; until then no instrument can be told
    from the error of the start.
    """
    start = outcome.book.beginning
    if start is None or start.unsteady:
        return outcome
    if moment.cycle >= start.until:
        return replace(outcome, book=replace(outcome.book, beginning=None))
    early = _early(design, tests, moment, start.onset_by)
    if not early:
        return outcome
    until = moment.time + (start.until - moment.cycle) * design.sample_us
    names = ", ".join(early)
    text = (
        f"the plant was moving when the run began ({names} does not fit a start in steady state): the tests of "
        f"innovations begin at {time_words(until)}, the estimates are Uncertain until then"
    )
    tests.settling_until[0] = max(int(tests.settling_until[0]), start.until)
    tests.resumed[0] = -1
    tests.restart_sums(moment.cycle + 1)
    tests.noisy[:] = 0
    moment.events[:] &= ~(told.NOISY | told.NOISY_ENDED)
    book = replace(outcome.book, beginning=replace(start, unsteady=True), episode=None)
    return _rested(
        replace(outcome, book=book), RestSpell(UNSTEADY, "", moment.time, until, names), text, moment.time
    )


def _early(design: DetectionDesign, tests: TestState, moment: Moment, onset_by: int) -> list[str]:
    """What has gone up on a sum that began to climb by a cycle: tags, or the model as a whole."""
    sensors = design.model.spec.sensors
    found = [
        item.tag
        for i, item in enumerate(sensors)
        if (moment.events[i] & told.SHIFT_UP and climbed_since(design, tests, i) <= onset_by)
        or (moment.events[i] & told.NOISY and moment.cycle <= onset_by)
    ]
    if not found and moment.news & told.MISFIT and moment.cycle <= onset_by:
        return ["the readings together"]
    return found


def climbed_since(design: DetectionDesign, tests: TestState, sensor: int) -> int:
    """Cycle at which the furthest of a sensor's sums last left zero: the sum taken back, innovation by innovation."""
    sums = np.maximum(tests.high[sensor], tests.low[sensor]) / design.tests.interval[sensor]
    pair = int(np.argmax(sums))
    side = 1.0 if tests.high[sensor, pair] >= tests.low[sensor, pair] else -1.0
    left = float(max(tests.high[sensor, pair], tests.low[sensor, pair]))
    sd = float(design.table(np.ones(design.kernel.n_sensors, dtype=np.int64))[0].sd[sensor])
    cycle, window = int(tests.cycle[0]), len(tests.ring)
    oldest = max(cycle - window, 0)
    while cycle > oldest and left > 0.0:
        cycle -= 1
        innovation = float(tests.ring[cycle % window, sensor])
        if innovation == innovation:
            z = min(max(side * innovation / sd, -design.tests.clip), design.tests.clip)
            left -= z - float(design.tests.reference[sensor, pair])
    return cycle


def _diagnose(design: DetectionDesign, outcome: FollowUp, tests: TestState, moment: Moment) -> FollowUp:
    """While a test of a sensor in use is up and no flag explains it: weigh the explanations and act on the verdict."""
    book = outcome.book
    use = sensors_in_use(design, book, tests, moment.cycle)
    up = bool(np.any((tests.up != 0) & (use != 0))) or tests.misfit[0] != 0
    explained = bool(explaining(design, book, moment.cycle, EXPLAINING))
    if not up:
        return _looked_enough(replace(outcome, book=replace(book, episode=None)), tests)
    if moment.cycle < tests.valid_from[0]:
        return outcome
    if explained:
        outcome, beside = look_again(design, outcome, tests, moment, use)
        if beside is None:
            return outcome
        return _open_shift(design, outcome, tests, moment, (beside.verdict, beside.found, use, NO_ACCOUNT))
    if explained_lately(book, moment.cycle):
        return outcome
    if book.episode is None:
        outcome = replace(outcome, book=replace(book, episode=Episode(moment.cycle)))
    return _act(design, outcome, tests, moment, use)


def _looked_enough(outcome: FollowUp, tests: TestState) -> FollowUp:
    """The running conformance probability takes over; anew where what brought the test up was no sensor's error."""
    weighed = outcome.book.weighed
    if weighed and max(weighed) < AT_FAULT:
        tests.forget_evidence()
    return replace(outcome, book=replace(outcome.book, weighed=()))


def _act(design: DetectionDesign, outcome: FollowUp, tests: TestState, moment: Moment, use: Ints) -> FollowUp:
    episode = outcome.book.episode
    waited = moment.cycle - episode.since if episode is not None else 0
    verdict, found = look(design, tests, use, gains=False)
    weighed = beyond_by_look(design, found, min(moment.cycle + 1 - int(tests.valid_from[0]), design.window))
    outcome = replace(outcome, book=replace(outcome.book, weighed=weighed))
    back_again = went_back(design, outcome, moment, (verdict, found))
    if back_again is not None:
        return back_again
    turn = waited - crc32(design.model.spec.name.encode()) % PATIENCE
    due = turn >= PATIENCE and turn % PATIENCE < design.tests.look_every
    worth = _worth_a_flag(design, verdict, found, waited)
    recently = episode is not None and 0 <= episode.weighed > moment.cycle - PATIENCE
    if not due and (recently or not worth):
        return outcome
    only = explanations(design)[verdict.best] if worth and not due else None
    verdict, found = look(design, tests, use, only=only)
    if only is not None and _worth_a_flag(design, verdict, found, waited):
        verdict, found = look(design, tests, use)
    if episode is not None:
        episode = replace(episode, weighed=moment.cycle)
        outcome = replace(outcome, book=replace(outcome.book, episode=episode))
    if _worth_a_flag(design, verdict, found, waited):
        account = account_of(design, tests, use, verdict, found)
        return _open_shift(design, outcome, tests, moment, (verdict, found, use, account))
    back = design.look_back(tests, use) if due else None
    if back is not None and _worth_a_flag(design, *back, waited):
        return _open_shift(design, outcome, tests, moment, (*back, use, NO_ACCOUNT))
    if waited >= PATIENCE and episode is not None and not episode.noted:
        return _note(outcome, moment, verdict)
    return outcome


def _worth_a_flag(design: DetectionDesign, verdict: Verdict, found: Likelihoods, waited: int) -> bool:
    """One name at ten to one; or, after some patience, a group of which some instrument or transfer function is certain."""
    if verdict.best < 0:
        return False
    suspect = explanations(design)[verdict.best]
    if suspect.source == "disturbance":
        return False
    size = abs(present_size(suspect, found, verdict.best)[0])
    worth = suspect.source != "sensor" or size > design.model.scaled.sensors[suspect.index].tolerance
    certain = verdict.instrument * (NAMING_RATIO + 1.0) > NAMING_RATIO
    return named(verdict) or (certain and worth and waited >= PATIENCE)


def _note(outcome: FollowUp, moment: Moment, verdict: Verdict) -> FollowUp:
    text = "most probable: " + ", ".join(
        f"{name} {probability:.2f}"
        for name, probability in zip(verdict.names[:3], verdict.probabilities[:3], strict=True)
    )
    episode = outcome.book.episode
    assert episode is not None
    return replace(
        outcome,
        book=replace(outcome.book, episode=replace(episode, noted=True)),
        notes=(*outcome.notes, Note(moment.time, "test up", text)),
    )


def _open_shift(
    design: DetectionDesign,
    outcome: FollowUp,
    tests: TestState,
    moment: Moment,
    seen: tuple[Verdict, Likelihoods, Ints, Account],
) -> FollowUp:
    verdict, found, use, account = seen
    suspect = explanations(design)[verdict.best]
    kind: Kind = "drift" if suspect.shape == "ramp" else "bias"
    kind = "model" if suspect.source == "gain" else kind
    size, size_sd = size_in_unit(design, tests, found, verdict.best)
    back = int(found.age[verdict.best]) - 1
    flag = Flag(
        flag_name(design.model.spec.name, suspect.name, kind, moment.time),
        suspect.name,
        kind,
        moment.time - back * design.sample_us,
        moment.time,
        None,
        size,
        size_sd,
        verdict.probabilities[0],
        verdict.group,
        account.onset_from(moment.time, design.sample_us),
        account.onset_to(moment.time, design.sample_us),
        account.hypotheses,
    )
    outcome, new = flagged_once_more(outcome, flag, moment.cycle)
    if new is None:
        return outcome
    flag = new
    outcome = opened(outcome, flag)
    isolated = flag.isolated and suspect.source == "sensor"
    if not (design.leave_out and isolated and int(np.sum(use)) > 1):
        return outcome
    exclusion = Exclusion(suspect.index, moment.cycle - back)
    book = replace(outcome.book, episode=None, weighed=(), exclusions=(*outcome.book.exclusions, exclusion))
    _restart(tests, moment.cycle + 1)
    return replace(outcome, book=book, exclusion=exclusion)


def _restart(tests: TestState, cycle: int) -> None:
    """After a sensor has been left out the sums start anew: what they had added up is explained."""
    down_since = np.where(tests.up != 0, cycle, tests.down_since)
    tests.restart_sums(cycle)
    tests.down_since[:] = down_since
