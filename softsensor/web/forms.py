"""What people enter in the page's forms, checked; and the acts that follow, each on the audit trail."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Annotated
from urllib.parse import quote

from fastapi import APIRouter, Form, Request
from fastapi.responses import RedirectResponse, Response

from plant_models.number_text import plain
from plant_models.specification import InputSpec, SensorSpec
from softsensor.records import changes
from softsensor.records.reader import Unit
from softsensor.records.tables import FINDINGS
from softsensor.web.pages import Pages, Refused, flag_answer, lab_answer
from softsensor.web.site import BadForm, ForeignForm, Site, choices_for
from softsensor.web.wording import difference_unit

LONGEST_NAME, LONGEST_TEXT = 100, 2000
Field = Annotated[str, Form()]


@dataclass(frozen=True)
class Person:
    """Who does something, and why."""

    name: str
    reason: str


def words(text: str, what: str, longest: int) -> str:
    """The text without blanks around it.

    :raises BadForm: nothing entered, too long, or characters that are no text.
    """
    said = text.replace("\r\n", "\n").strip()
    if not said:
        raise BadForm(f"{what} is missing; expected some words")
    if len(said) > longest:
        raise BadForm(f"{what} has {len(said)} characters; expected at most {longest}")
    if not all(sign.isprintable() or sign == "\n" for sign in said):
        raise BadForm(f"{what} has a character that cannot be printed; expected plain text")
    return said


def person(actor: str, reason: str) -> Person:
    """Name and reason, both needed.

    :raises BadForm: one of them is missing.
    """
    name = words(actor, "your name", LONGEST_NAME)
    if "\n" in name:
        raise BadForm("your name has more than one line; expected one")
    return Person(name, words(reason, "the reason", LONGEST_TEXT))


def calibration(text: str, what: str) -> float | None:
    """A calibration's result; None where nothing is entered.

    :raises BadForm: not a finite number.
    """
    if not text.strip():
        return None
    try:
        value = float(text.strip().replace("\u2212", "-"))
    except ValueError:
        value = math.nan
    if not math.isfinite(value) or "_" in text:
        raise BadForm(
            f"{what} is {text.strip()[:40]!r}; expected a number with a decimal point, such as -0.35"
        )
    return value


def check_errors(site: Site, unit: Unit, tag: str, found: float | None, left: float | None) -> None:
    """Refuse an error that the instrument cannot have.

    :raises BadForm: one larger than its range is wide.
    """
    spec = site.models.spec(site.models.revision_of(unit))
    items: tuple[SensorSpec | InputSpec, ...] = (*spec.sensors, *spec.inputs)
    item = next((item for item in items if item.tag == tag), None)
    for what, value in (("as found", found), ("as left", left)):
        if item is not None and value is not None and abs(value) > item.range[1] - item.range[0]:
            width = f"{plain(item.range[1] - item.range[0])} {difference_unit(item.unit)}"
            raise BadForm(f"{what} is {value:g}; expected an error no larger than the range is wide, {width}")


def checked_finding(finding: str, as_found: str, as_left: str) -> tuple[float | None, float | None]:
    """As found and as left of a finding.

    :raises BadForm: no such finding, no number, or a calibration that does not belong to the finding.
    """
    if finding not in FINDINGS:
        raise BadForm(f"the finding is {finding[:40]!r}; expected one of: {', '.join(FINDINGS)}")
    found, left = calibration(as_found, "as found"), calibration(as_left, "as left")
    if finding != "confirmed" and (found is not None or left is not None):
        raise BadForm("as found and as left belong to a confirmed finding; expected them empty otherwise")
    return found, left


def form_routes(site: Site, pages: Pages) -> APIRouter:
    """The addresses that take forms."""
    router = APIRouter(default_response_class=RedirectResponse)

    def ours(request: Request, token: str) -> None:
        refusal = site.guard.refusal(request, token)
        if refusal is not None:
            raise ForeignForm(refusal)

    def back_to_flag(unit: str, flag: str) -> RedirectResponse:
        return RedirectResponse(f"/units/{quote(unit, safe='')}/flag?id={quote(flag, safe='')}", 303)

    @router.post("/units/{name:path}/flag/acknowledge")
    def acknowledge(
        request: Request, name: str, id: str, token: Field = "", actor: Field = "", reason: Field = ""
    ) -> Response:
        ours(request, token)
        site.flag(name, id)
        try:
            who = person(actor, reason)
        except BadForm as problem:
            typed = {"actor": actor, "reason": reason}
            return flag_answer(site, pages, request, (name, id), Refused(str(problem), typed, "acknowledge"))
        changes.acknowledge_flag(site.database, id, who.name, who.reason)
        return back_to_flag(name, id)

    @router.post("/units/{name:path}/flag/comment")
    def comment(
        request: Request, name: str, id: str, token: Field = "", actor: Field = "", reason: Field = ""
    ) -> Response:
        ours(request, token)
        site.flag(name, id)
        try:
            who = person(actor, reason)
        except BadForm as problem:
            typed = {"actor": actor, "reason": reason}
            return flag_answer(site, pages, request, (name, id), Refused(str(problem), typed, "comment"))
        changes.comment_flag(site.database, id, who.name, who.reason)
        return back_to_flag(name, id)

    @router.post("/units/{name:path}/flag/finding")
    def finding(
        request: Request,
        name: str,
        id: str,
        token: Field = "",
        finding: Field = "",
        actor: Field = "",
        reason: Field = "",
        as_found: Field = "",
        as_left: Field = "",
    ) -> Response:
        ours(request, token)
        unit, flag, _ = site.flag(name, id)
        try:
            who = person(actor, reason)
            found, left = checked_finding(finding, as_found, as_left)
            check_errors(site, unit, flag.tag, found, left)
        except BadForm as problem:
            typed = {
                "finding": finding,
                "actor": actor,
                "reason": reason,
                "as_found": as_found,
                "as_left": as_left,
            }
            return flag_answer(site, pages, request, (name, id), Refused(str(problem), typed, "finding"))
        changes.set_finding(site.database, id, finding, who.name, who.reason, as_found=found, as_left=left)
        return back_to_flag(name, id)

    @router.post("/units/{name:path}/lab/decide")
    def decide(
        request: Request,
        name: str,
        id: int,
        token: Field = "",
        decision: Field = "",
        actor: Field = "",
        reason: Field = "",
    ) -> Response:
        ours(request, token)
        _, lab = site.lab(name, id)
        choices = choices_for(lab, site.other_reports(lab))
        if decision not in choices:
            wanted = (
                f"expected one of: {', '.join(choices)}" if choices else f"the result is {lab.status} already"
            )
            raise BadForm(f"the decision is {decision[:40]!r}; {wanted}")
        try:
            who = person(actor, reason)
        except BadForm as problem:
            typed = {"actor": actor, "reason": reason}
            return lab_answer(site, pages, request, (name, id), Refused(str(problem), typed, "decide"))
        changes.decide_lab(site.database, id, decision, who.name, who.reason)
        return RedirectResponse(f"/units/{quote(name, safe='')}/lab?id={id}", 303)

    return router
