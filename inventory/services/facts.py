"""Write down what has happened, whatever was promised: facts are never refused.

When a fact leaves less in a bottle than is held, holds are cancelled until the rest can be kept:
those nobody has approved first, of these the latest first. A bottle that may not be used any more
keeps none. Whoever is hit finds a notice, and the app that made the reservation a message.
"""

import uuid
from collections import defaultdict
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date

from django.db import transaction
from django.db.models import F, Q

from inventory import locks
from inventory.models import Balance, Bottle, Hold, Reservation
from inventory.quantities import Quantity, converted, own_quantity
from inventory.services.book import BookLine, write_lines
from inventory.services.notices import CancelledHold, tell_who_is_hit
from labplan.base import clock
from labplan.base.errors import Busy
from labplan.base.rights import Actor

TRIES = 6
ABOVE_THE_BOOK = "more came out of the bottle than its book said"
# What those are told whose holds are cancelled; the reason given is the business of its project.
_WHY = {
    "use": "more was taken out of it than was free",
    "loss": "some of it was lost",
    "disposal": "it was disposed of",
    "correction": "less was found in it than its book said",
}


@dataclass(frozen=True)
class Fact:
    """What came out of a bottle (`use`, `loss`, `disposal`) or is in it now (`correction`).

    `amount` None means all that is there. A use may be charged against a hold, also one on another
    bottle; `closes` gives the rest of that hold back.
    """

    bottle: Bottle
    kind: str
    amount: int | None
    quantity: Quantity | None = None
    # of a count: a smaller difference than this, or under 1 % of the book, is none
    uncertainty: int = 0
    reason: str = ""
    hold_id: int | None = None
    closes: bool = True


@dataclass(frozen=True)
class Counted:
    """What a count found, in the base unit of the bottle, and whether the book was corrected."""

    bottle: Bottle
    book: int
    found: int
    uncertainty: int
    verdict: str  # "agrees", "within_uncertainty", "under_1_pct", "corrected"


@dataclass(frozen=True)
class FactsWritten:
    operation: uuid.UUID
    cancelled: tuple[CancelledHold, ...]
    counted: tuple[Counted, ...]


class _MoreToLock(Exception):
    """Holds of reservations that are not locked yet have to be cancelled."""

    def __init__(self, reservations: set[int]) -> None:
        super().__init__()
        self.reservations = reservations


def write_facts(
    facts: Sequence[Fact], *, actor: Actor, project_id: int | None, reason: str,
    operation_id: uuid.UUID | None = None, booked_on: date | None = None,
    statuses: Mapping[int, str] | None = None, check: Callable[[Bottle], None] | None = None,
) -> FactsWritten:  # fmt: skip
    """Record facts and, by bottle, new `statuses` in the caller's open transaction.

    `check` looks at each bottle when nobody else can change it any more, and may raise. Raises
    Busy when others keep making holds on the same bottles. Locks reservations, then
    balances, each in the order of their keys.
    """
    locks.require_transaction()
    own = {fact.hold_id for fact in facts if fact.hold_id is not None}
    rows = Hold.objects.filter(pk__in=own).values_list("reservation_id", "bottle_id")
    found = list(rows) if own else []
    wanted = {reservation_id for reservation_id, _ in found}
    bottles = {fact.bottle.pk for fact in facts} | set(statuses or {})
    bottles |= {bottle_id for _, bottle_id in found}
    for _ in range(TRIES):
        try:
            with transaction.atomic():
                locked = locks.lock_reservations(wanted)
                work = _Work(facts, dict(statuses or {}), bottles, locked)
                for shelf in work.shelves.values():
                    (check or _no_check)(shelf.bottle)
                return work.write(
                    actor=actor, project_id=project_id, reason=reason,
                    operation_id=operation_id, booked_on=booked_on,
                )  # fmt: skip
        except _MoreToLock as more:
            wanted |= more.reservations
    raise Busy("Others keep setting the same bottles aside; send it again.")


def _no_check(bottle: Bottle) -> None:
    return None


@dataclass
class _Shelf:
    """One bottle while its lines are worked out."""

    bottle: Bottle
    on_hand: int
    held: int
    up: list[BookLine] = field(default_factory=list)
    back: list[BookLine] = field(default_factory=list)
    out: list[BookLine] = field(default_factory=list)


def _shelf(bottle: Bottle, balance: Balance) -> _Shelf:
    bottle.balance = balance
    return _Shelf(bottle, balance.on_hand, balance.held)


class _Work:
    """The lines of one operation, worked out on locked rows."""

    def __init__(
        self, facts: Sequence[Fact], statuses: dict[int, str], bottles: set[int],
        locked: dict[int, Reservation],
    ) -> None:  # fmt: skip
        self.facts, self.statuses, self.locked = facts, statuses, locked
        balances = locks.read_balances(bottles)
        # Read after the locks: nobody makes or changes a hold on these bottles any more.
        rows = Bottle.objects.select_related("form__substance").in_bulk(bottles)
        self.shelves = {pk: _shelf(rows[pk], balance) for pk, balance in balances.items()}
        self.holds = {hold.pk: hold for hold in self._holds_on(bottles)}
        self.left = {pk: _left(hold) for pk, hold in self.holds.items()}
        self.used: dict[int, int] = defaultdict(int)
        self.given_back: dict[int, int] = defaultdict(int)
        self.touched: set[int] = set()
        self.carried_out: set[int] = set()
        self.cancelled: list[CancelledHold] = []
        self.counted: list[Counted] = []

    def _holds_on(self, bottles: set[int]) -> list[Hold]:
        """What is held of these bottles, and the holds that the facts are charged against."""
        own = [fact.hold_id for fact in self.facts if fact.hold_id is not None]
        wanted = Q(bottle__in=bottles, state=Hold.State.OPEN) | Q(pk__in=own)
        holds = list(Hold.objects.filter(wanted).select_related("reservation"))
        for hold in holds:
            hold.bottle = self.shelves[hold.bottle_id].bottle
        return holds

    def write(
        self, *, actor: Actor, project_id: int | None, reason: str,
        operation_id: uuid.UUID | None, booked_on: date | None,
    ) -> FactsWritten:  # fmt: skip
        for fact in self.facts:
            if fact.kind == "correction":
                self._count(fact)
            else:
                self._take(fact)
        for shelf in self.shelves.values():
            self._found_more(shelf)
            self._cancel_what_cannot_be_kept(shelf)
        lines = [
            line
            for pk in sorted(self.shelves)
            for part in ("up", "back", "out")
            for line in getattr(self.shelves[pk], part)
        ]
        operation = operation_id or uuid.uuid4()
        if lines:
            write_lines(
                lines, actor=actor, project_id=project_id, reason=reason,
                operation_id=operation, booked_on=booked_on,
            )  # fmt: skip
        self._store_holds()
        self._store_statuses()
        self._store_openings(booked_on or clock.today())
        tell_who_is_hit(self.cancelled)
        return FactsWritten(operation, tuple(self.cancelled), tuple(self.counted))

    def _count(self, fact: Fact) -> None:
        shelf = self.shelves[fact.bottle.pk]
        found = fact.amount or 0
        verdict = verdict_on(shelf.on_hand, found, fact.uncertainty)
        self.counted.append(Counted(shelf.bottle, shelf.on_hand, found, fact.uncertainty, verdict))
        if verdict != "corrected":
            return
        change = found - shelf.on_hand
        quantity = fact.quantity or own_quantity(shelf.bottle, abs(change))
        line = _line(
            shelf.bottle, "correction", quantity, reason=fact.reason, on_hand_change=change
        )
        (shelf.up if change > 0 else shelf.out).append(line)
        shelf.on_hand += change

    def _take(self, fact: Fact) -> None:
        shelf = self.shelves[fact.bottle.pk]
        amount = shelf.on_hand if fact.amount is None else fact.amount
        from_hold = self._settle_hold(fact, amount) if fact.hold_id is not None else 0
        if amount == 0:
            return
        quantity = fact.quantity or own_quantity(shelf.bottle, amount)
        shelf.out.append(
            _line(
                shelf.bottle, fact.kind, quantity, reason=fact.reason, on_hand_change=-amount,
                held_change=-from_hold, hold_id=fact.hold_id,
            )
        )  # fmt: skip
        shelf.on_hand -= amount
        shelf.held -= from_hold

    def _settle_hold(self, fact: Fact, amount: int) -> int:
        """Take the use from its hold as far as it goes; return how much that is."""
        assert fact.hold_id is not None
        hold, left = self.holds[fact.hold_id], self.left[fact.hold_id]
        self.carried_out.add(hold.pk)
        if left == 0:
            return 0
        self.touched.add(hold.pk)
        if hold.bottle_id == fact.bottle.pk:
            from_hold = min(left, amount)
            self.left[hold.pk] -= from_hold
            self.used[hold.pk] += from_hold
            if fact.closes:
                self._give_back(hold, self.left[hold.pk], fact.reason)
            return from_hold
        # From another bottle: what this one was to give is free again.
        same = converted(
            fact.bottle, amount, given_by=fact.bottle.measured_by, wanted_by=hold.bottle.measured_by
        )
        self._give_back(hold, left if fact.closes or same is None else min(left, same), fact.reason)
        return 0

    def _give_back(self, hold: Hold, amount: int, reason: str) -> None:
        if amount == 0:
            return
        shelf = self.shelves[hold.bottle_id]
        shelf.back.append(
            _line(
                shelf.bottle, "release", own_quantity(shelf.bottle, amount), reason=reason,
                held_change=-amount, hold_id=hold.pk, project_id=hold.reservation.project_id,
            )
        )  # fmt: skip
        shelf.held -= amount
        self.left[hold.pk] -= amount
        self.given_back[hold.pk] += amount
        self.touched.add(hold.pk)

    def _found_more(self, shelf: _Shelf) -> None:
        """More was taken out than the book knew of: it was there, so the book is wrong."""
        if shelf.on_hand >= 0:
            return
        found = -shelf.on_hand
        shelf.up.append(
            _line(
                shelf.bottle, "correction", own_quantity(shelf.bottle, found),
                reason=ABOVE_THE_BOOK, on_hand_change=found,
            )
        )  # fmt: skip
        shelf.on_hand = 0

    def _cancel_what_cannot_be_kept(self, shelf: _Shelf) -> None:
        status = self.statuses.get(shelf.bottle.pk, shelf.bottle.status)
        keeps_none = shelf.bottle.pk in self.statuses and status != Bottle.Status.USABLE
        there = [
            hold
            for hold in self.holds.values()
            if hold.bottle_id == shelf.bottle.pk and self.left[hold.pk] > 0
        ]
        victims: list[Hold] = []
        held = shelf.held
        for hold in sorted(there, key=_given_up_first):
            if held <= shelf.on_hand and not keeps_none:
                break
            victims.append(hold)
            held -= self.left[hold.pk]
        missing = {hold.reservation_id for hold in victims} - self.locked.keys()
        if missing:
            raise _MoreToLock(missing)
        why = f"it is {status}" if keeps_none else self._why(shelf) if victims else ""
        for hold in victims:
            self.cancelled.append(CancelledHold.of(hold, self.left[hold.pk], why))
            self._give_back(hold, self.left[hold.pk], f"cancelled: {why}")

    def _why(self, shelf: _Shelf) -> str:
        [kind, *_] = [fact.kind for fact in self.facts if fact.bottle.pk == shelf.bottle.pk]
        return _WHY[kind]

    def _store_holds(self) -> None:
        cancelled = {hold.hold_id for hold in self.cancelled}
        for pk in sorted(self.touched):
            hold = self.holds[pk]
            hold.used += self.used[pk]
            hold.given_back += self.given_back[pk]
            if self.left[pk] == 0:
                hold.state = _closed_state(hold, pk in cancelled, pk in self.carried_out)
            hold.save(update_fields=["used", "given_back", "state"])
        changed = {self.holds[pk].reservation_id for pk in self.touched}
        for reservation in (self.locked[pk] for pk in sorted(changed)):
            reservation.version += 1
            if not reservation.holds.filter(state=Hold.State.OPEN).exists():
                reservation.state = Reservation.State.CLOSED
            reservation.save(update_fields=["state", "version"])

    def _store_statuses(self) -> None:
        for pk, status in self.statuses.items():
            rows = Bottle.objects.filter(pk=pk).exclude(status=Bottle.Status.DISPOSED)
            rows.update(status=status, version=F("version") + 1)
            locks.set_usable(pk, status == Bottle.Status.USABLE)

    def _store_openings(self, day: date) -> None:
        """Nothing comes out of a sealed bottle."""
        sealed = {f.bottle.pk for f in self.facts if f.kind == "use" and not f.bottle.opened_on}
        if sealed:
            Bottle.objects.filter(pk__in=sealed, opened_on=None).update(
                opened_on=day, version=F("version") + 1
            )


def verdict_on(book: int, found: int, uncertainty: int) -> str:
    """Whether a count and the book differ: not inside the uncertainty, nor under 1 %."""
    difference = abs(found - book)
    if difference == 0:
        return "agrees"
    if difference <= uncertainty:
        return "within_uncertainty"
    return "under_1_pct" if 100 * difference < book else "corrected"


def _given_up_first(hold: Hold) -> tuple[bool, float, int]:
    """Not approved before approved, of these the latest first."""
    return (
        hold.reservation.is_firm,
        -hold.reservation.created_at.timestamp(),
        -hold.pk,
    )


def _left(hold: Hold) -> int:
    return hold.amount - hold.used - hold.given_back if hold.state == Hold.State.OPEN else 0


def _closed_state(hold: Hold, was_cancelled: bool, was_carried_out: bool) -> str:
    if was_cancelled:
        return Hold.State.CANCELLED
    return Hold.State.USED if hold.used or was_carried_out else Hold.State.RELEASED


def _line(
    bottle: Bottle, kind: str, quantity: Quantity, *, reason: str, on_hand_change: int = 0,
    held_change: int = 0, hold_id: int | None = None, project_id: int | None = None,
) -> BookLine:  # fmt: skip
    return BookLine(
        bottle_id=bottle.pk, kind=kind, on_hand_change=on_hand_change, held_change=held_change,
        entered_amount=quantity.entered_amount, entered_unit=quantity.entered_unit,
        density_g_per_ml=quantity.density_g_per_ml, density_source=quantity.density_source,
        amount_nmol=quantity.amount_nmol, hold_id=hold_id, reason=reason, project_id=project_id,
    )  # fmt: skip
