"""Plan a queued procedure and settle the result in one transaction.

The attempt is counted and committed before the work, so that work which kills its process is
not repeated for ever. What settles is the attempt that was begun last; any other does nothing.
"""

import json
from contextlib import suppress
from dataclasses import dataclass
from datetime import timedelta
from decimal import Decimal

from django.db import DatabaseError, OperationalError, close_old_connections, transaction
from django.db.models import F, QuerySet

from inventory.errors import StockShort
from inventory.services import HoldLine, hold_lines, keep_still
from labplan.base import clock, outbox
from labplan.base.canonical import canonical_bytes, sha256_hex
from labplan.base.errors import DomainError, NotAllowed
from labplan.base.events import record_event
from labplan.base.models import Person
from labplan.base.problems import is_lock_timeout
from labplan.base.rights import Actor, actor_for
from labplan.base.seal import newest_printed
from labplan.planning.values import Charge
from labplan.procedures import life, progress
from labplan.procedures.engine import PlannedOn, Scale, Wishes, plan_on_shelf, read_target
from labplan.procedures.models import Document, Procedure
from labplan.procedures.services.changes import announce_change, note_settled

MAX_BROKEN_OFF = 2
ENGINE_CRASHED = (
    "Planning this broke off twice: it crashed, or ran over its time limit. Nothing is held. Tell "
    "the operator this code; asking again will end the same."
)
FREE_TRIES = 2
HOLD_DAYS = 14


class RequesterInactive(NotAllowed):
    code = "requester_inactive"


class ProjectClosed(NotAllowed):
    code = "project_closed"


@dataclass(frozen=True)
class Attempt:
    """One try at planning: who asked, what for, which message brought it."""

    procedure_id: int
    code: str
    number: int
    message_id: int
    actor: Actor
    project_id: int
    smiles: str
    scale: Scale
    wishes: Wishes


@dataclass(frozen=True)
class Draft:
    """A plan and the bytes of its document, not stored yet."""

    planned: PlannedOn
    body: bytes


def plan_procedure(*, procedure_id: int, message_id: int) -> None:
    """Plan and settle. Safe to repeat: a procedure that is settled already is left alone."""
    attempt = begin_attempt(procedure_id, message_id)
    if attempt is None:
        return
    try:
        _plan_until_settled(attempt)
    except DomainError as error:
        _settle_bare(attempt, life.FAILED, error.code, error.detail)
    except MemoryError:
        raise  # counts as broken off: the next try would eat as much
    except Exception:
        _note_an_orderly_end(attempt)
        raise


def _plan_until_settled(attempt: Attempt) -> None:
    for _ in range(FREE_TRIES):
        draft = compute_plan(attempt)
        try:
            settle_plan(attempt, draft)
            return
        except StockShort:
            continue  # somebody was faster: look at the shelf again
        except OperationalError as error:
            if not is_lock_timeout(error):
                raise
            continue  # somebody sits on the bottles: nothing was changed, look again
    _settle_on_still_rows(attempt)


def begin_attempt(procedure_id: int, message_id: int) -> Attempt | None:
    """Count and commit the attempt; None when there is nothing left to do."""
    with transaction.atomic(durable=True):
        procedure = _locked(procedure_id)
        if procedure.state != life.QUEUED:
            outbox.mark_done(message_id)
            return None
        if procedure.broken_off >= MAX_BROKEN_OFF:
            _close(procedure, life.FAILED, message_id, [("engine_crashed", ENGINE_CRASHED)])
            return None
        procedure.attempt += 1
        procedure.broken_off += 1
        procedure.phase = progress.READING
        procedure.save(update_fields=["attempt", "broken_off", "phase"])
        try:
            actor = _actor_behind(procedure)
        except DomainError as error:
            _close(procedure, life.FAILED, message_id, [(error.code, error.detail)])
            return None
        return Attempt(
            procedure.pk, procedure.code, procedure.attempt, message_id, actor,
            procedure.project_id, procedure.target_smiles,
            Scale(_float(procedure.product_mass_mg), _float(procedure.acceptor_amount_mmol)),
            Wishes(procedure.promoter or None, procedure.solvent or None),
        )  # fmt: skip


def _actor_behind(procedure: Procedure) -> Actor:
    """Who asked, with the roles of this moment.

    Raises RequesterInactive or ProjectClosed: between the request and now much may have changed.
    """
    person = Person.objects.filter(code=procedure.requested_by, is_active=True).first()
    if person is None:
        raise RequesterInactive(
            f"{procedure.requested_by}, who asked for this, is not active any more; somebody else "
            "of the project must ask for it."
        )
    if not procedure.project.is_open:
        raise ProjectClosed(
            f"The project {procedure.project.code} was closed meanwhile; nothing is charged to it."
        )
    return actor_for(person)


def _note_an_orderly_end(attempt: Attempt) -> None:
    """An attempt that ends with an error has not crashed: it may be repeated as often as needed."""
    close_old_connections()  # it may have been the connection that broke
    with suppress(DatabaseError):
        _of_attempt(attempt).update(broken_off=F("broken_off") - 1, phase=progress.WAITING)


def _of_attempt(attempt: Attempt) -> QuerySet[Procedure]:
    return Procedure.objects.filter(
        pk=attempt.procedure_id, state=life.QUEUED, attempt=attempt.number
    )


def compute_plan(attempt: Attempt) -> Draft:
    """Snapshot, plan and document, outside any transaction of its own."""
    target = read_target(attempt.smiles)
    _show_phase(attempt, progress.SIZING)
    planned = plan_on_shelf(
        actor=attempt.actor,
        target=target,
        scale=attempt.scale,
        wishes=attempt.wishes,
        as_of=clock.today(),
    )
    _show_phase(attempt, progress.WRITING)
    draft = Draft(planned, canonical_bytes(planned.document()))
    _show_phase(attempt, progress.SETTLING)
    return draft


def _show_phase(attempt: Attempt, phase: str) -> None:
    _of_attempt(attempt).update(phase=phase)


def settle_plan(attempt: Attempt, draft: Draft) -> None:
    """ONE transaction: compare the attempt, hold the lines, store the document, set the state.

    Raises StockShort when the shelf has moved since the snapshot; nothing is changed then.
    """
    with transaction.atomic(durable=True):
        _settle(attempt, draft)


def _settle_on_still_rows(attempt: Attempt) -> None:
    """The last try: plan while nobody else can move the bottles in question."""
    seen = compute_plan(attempt).planned.bottles_seen
    try:
        with transaction.atomic(durable=True):
            keep_still(seen)
            _settle(attempt, compute_plan(attempt))
    except (StockShort, OperationalError) as error:
        if isinstance(error, OperationalError) and not is_lock_timeout(error):
            raise
        _settle_bare(
            attempt, life.CONTENDED, "stock_contended",
            "Others kept moving the same bottles; send the request again.",
        )  # fmt: skip


def _settle(attempt: Attempt, draft: Draft) -> None:
    planned = draft.planned
    procedure = _locked(attempt.procedure_id)
    if procedure.state != life.QUEUED or procedure.attempt != attempt.number:
        return
    actor = _actor_behind(procedure)
    state = _state_of(planned)
    if state == life.PLANNED:
        reservation = hold_lines(
            actor=actor, project_id=attempt.project_id,
            purpose=f"procedure {attempt.code}",
            expires_on=clock.today() + timedelta(days=HOLD_DAYS),
            lines=_hold_lines(planned),
        )  # fmt: skip
        procedure.reservation_code = reservation.code
    procedure.document = _store_document(attempt, draft.body)
    _close(procedure, state, attempt.message_id, _reasons_of(planned))


def _state_of(planned: PlannedOn) -> str:
    plan = planned.plan
    if plan.verdict != "plannable" or plan.route is None:
        return life.REFUSED
    return life.PLANNED if plan.route.is_available else life.SHORT


def _reasons_of(planned: PlannedOn) -> list[tuple[str, str]]:
    plan = planned.plan
    found = [(reason.code, reason.detail) for reason in plan.reasons]
    if plan.route is not None:
        found += [
            ("short", f"{s.stage}, {s.role}: {s.needed} of {s.name} needed; {s.detail}")
            for s in plan.route.shortages
        ]
    return found


def _hold_lines(planned: PlannedOn) -> list[HoldLine]:
    assert planned.plan.route is not None
    return [
        _hold_line(charge)
        for stage in planned.plan.route.stages
        for charge in stage.charges
        if charge.bottle is not None
    ]


def _hold_line(charge: Charge) -> HoldLine:
    assert charge.bottle is not None
    by_volume = charge.dispense == "volume"
    entered = charge.volume_ml if by_volume else charge.mass_mg
    density = charge.bottle.density_g_per_ml
    return HoldLine(
        bottle_code=charge.bottle.code,
        amount=charge.hold_amount,
        entered_amount=f"{entered:.10g}",
        entered_unit="mL" if by_volume else "mg",
        density_g_per_ml=Decimal(repr(density)) if density is not None else None,
        amount_nmol=round(charge.amount_mmol * 1_000_000) if charge.amount_mmol else None,
    )


def _store_document(attempt: Attempt, body: bytes) -> Document:
    return Document.objects.create(
        procedure_id=attempt.procedure_id, attempt=attempt.number, body=body,
        sha256=sha256_hex(body), seal=newest_printed(), created_at=clock.now(),
    )  # fmt: skip


def _settle_bare(attempt: Attempt, state: str, code: str, detail: str) -> None:
    """End an attempt without a document."""
    with transaction.atomic(durable=True):
        procedure = _locked(attempt.procedure_id)
        if procedure.state == life.QUEUED and procedure.attempt == attempt.number:
            _close(procedure, state, attempt.message_id, [(code, detail)])


def _close(
    procedure: Procedure, state: str, message_id: int, reasons: list[tuple[str, str]]
) -> None:
    before = procedure.state
    procedure.state = life.require_end(before, "plan", state)
    procedure.reasons = json.dumps([{"code": c, "detail": d} for c, d in reasons])
    procedure.version += 1
    procedure.settled_at = clock.now()
    procedure.phase = progress.ENDED
    procedure.save()
    record_event(
        actor_code=procedure.requested_by, kind="procedure.settled",
        subject=f"procedure {procedure.code}", before=before, after=state,
    )  # fmt: skip
    outbox.mark_done(message_id)
    announce_change(procedure)
    note_settled(procedure)


def _locked(procedure_id: int) -> Procedure:
    return Procedure.objects.select_for_update(no_key=True, of=("self",)).get(pk=procedure_id)


def _float(value: Decimal | None) -> float | None:
    return float(value) if value is not None else None
