"""Draw commands and run them on the real services. A command is a plain dict, as it is logged."""

import random
import uuid
from collections.abc import Callable
from datetime import datetime, timedelta
from decimal import Decimal
from typing import Any

from django.db import OperationalError

from inventory import services
from inventory.models import Bottle, Hold, Place, Reservation
from inventory.quantities import Asked
from labplan.base import clock
from labplan.base.errors import DomainError
from labplan.base.models import Person, Project
from labplan.base.problems import is_lock_timeout
from labplan.base.rights import Actor, actor_for

Command = dict[str, Any]
# kind -> how often of 100
WEIGHTS = {
    "reserve": 30, "reserve_substance": 6, "reserve_firm": 7, "use": 26, "release": 8,
    "take": 6, "loss": 2, "return": 3, "count": 5, "decant": 2, "status": 2, "transfer": 1,
    "break": 0.2, "extend": 1.8,
}  # fmt: skip
REFRESH_EVERY = 25


class Bench:
    """Who acts and on what, in one process; what it knows of the stock may be out of date."""

    def __init__(self, slot: int) -> None:
        self.slot = slot
        self.project = Project.objects.get(code="P1")
        people = Person.objects.filter(code__in=["LEAD", "STOCK_KEEPER"])
        self.actors: dict[str, Actor] = {person.code: actor_for(person) for person in people}
        self.places = list(Place.objects.values_list("code", flat=True))
        self.bottles: list[str] = []
        self.lines: list[tuple[str, int, str, int]] = []

    def refresh(self) -> None:
        rows = Bottle.objects.exclude(status="disposed").order_by("code")
        self.bottles = list(rows.values_list("code", flat=True))
        holds = Hold.objects.filter(state="open").order_by("-pk")
        self.lines = [
            (str(code), line, bottle, amount)
            for code, line, bottle, amount in holds.values_list(
                "reservation__code", "line", "bottle__code", "amount"
            )[:60]
        ]

    # ---- draw ----

    def draw(self, seed: int, number: int) -> Command:
        """The command with this number: the same for the same seed and the same stock."""
        dice = random.Random(f"{seed}/{self.slot}/{number}")
        if number % REFRESH_EVERY == 0 or not self.bottles:
            self.refresh()
        kind = dice.choices(list(WEIGHTS), weights=list(WEIGHTS.values()))[0]
        if kind in ("use", "release", "extend") and not self.lines:
            kind = "reserve"
        arguments = getattr(self, f"_draw_{kind}")(dice)
        # Clocks of machines jump, forwards and backwards, and nothing may rest on their order.
        at = datetime.fromisoformat("2026-12-01T08:00:00+00:00")
        at += timedelta(seconds=number, microseconds=dice.randrange(10**6))
        at += timedelta(days=dice.choice([0, 0, 0, 0, 1, -1, 3]), minutes=dice.randrange(-60, 60))
        operation = uuid.UUID(int=dice.getrandbits(128))
        return {
            "op": str(operation), "kind": kind, "args": arguments, "number": number,
            "at": at.isoformat(timespec="microseconds"),
        }  # fmt: skip

    def _draw_reserve(self, dice: random.Random) -> Any:
        count = dice.choice([1, 1, 2, 3])
        return {
            "lines": [
                [dice.choice(self.bottles), dice.randrange(50_000, 400_000)] for _ in range(count)
            ]
        }

    _draw_reserve_firm = _draw_reserve

    def _draw_reserve_substance(self, dice: random.Random) -> Any:
        return {"amount": dice.randrange(100_000, 3_000_000)}

    def _draw_use(self, dice: random.Random) -> Any:
        code, line, bottle, amount = dice.choice(self.lines)
        factor = dice.choice([0.3, 0.9, 1, 1, 1, 1.05, 1.6])
        other = dice.choice(self.bottles) if dice.random() < 0.1 else ""
        return {
            "reservation": code, "line": line, "amount": max(1, int(amount * factor)),
            "bottle": other if other != bottle else "", "closes": dice.random() < 0.8,
        }  # fmt: skip

    def _draw_release(self, dice: random.Random) -> Any:
        return {"reservation": dice.choice(self.lines)[0]}

    _draw_extend = _draw_release

    def _draw_take(self, dice: random.Random) -> Any:
        return {"bottle": dice.choice(self.bottles), "amount": dice.randrange(1, 500_000)}

    _draw_loss = _draw_return = _draw_take

    def _draw_count(self, dice: random.Random) -> Any:
        return {
            "bottle": dice.choice(self.bottles), "found": dice.randrange(500_000, 6_000_000),
            "uncertainty": dice.choice([0, 20_000, 300_000]),
        }  # fmt: skip

    def _draw_decant(self, dice: random.Random) -> Any:
        code = f"D{self.slot}-{dice.getrandbits(40):x}"
        return {
            "bottle": dice.choice(self.bottles), "amount": dice.randrange(1, 600_000),
            "code": code, "place": dice.choice(self.places),
        }  # fmt: skip

    def _draw_status(self, dice: random.Random) -> Any:
        status = dice.choices(["quarantined", "usable"], weights=[1, 9])[0]
        return {"bottle": dice.choice(self.bottles), "status": status}

    def _draw_transfer(self, dice: random.Random) -> Any:
        return {"bottle": dice.choice(self.bottles), "place": dice.choice(self.places)}

    def _draw_break(self, dice: random.Random) -> Any:
        # Only what was decanted: the shelf must not run empty in a long run.
        decanted = [code for code in self.bottles if code.startswith("D")]
        return {"bottle": dice.choice(decanted or self.bottles)}

    # ---- run ----

    def run(self, command: Command) -> dict[str, Any]:
        """Run a command at its own time; what came of it in a word."""
        instant = datetime.fromisoformat(command["at"])
        with clock.replaced_by(clock.standing_at(instant)):
            try:
                self._work(command["kind"])(command["args"], uuid.UUID(command["op"]))
            except DomainError as error:
                return {"refused": error.code}
            except OperationalError as error:
                if not is_lock_timeout(error):
                    raise
                return {"busy": str(getattr(error.__cause__, "sqlstate", "locked"))}
        return {"ok": True}

    def _work(self, kind: str) -> Callable[[Any, uuid.UUID], Any]:
        found: Callable[[Any, uuid.UUID], Any] = getattr(self, f"_run_{kind}")
        return found

    def _run_reserve(self, args: Any, op: uuid.UUID) -> None:
        lines = tuple(
            services.ReservationLine(own(amount), bottle_code=code)
            for code, amount in args["lines"]
        )
        services.reserve(
            actor=self.actors["LEAD"], project=self.project,
            order=services.ReservationOrder(lines, "simulated"), operation_id=op,
        )  # fmt: skip

    def _run_reserve_substance(self, args: Any, op: uuid.UUID) -> None:
        line = services.ReservationLine(own(args["amount"]), substance_code="powder")
        services.reserve(
            actor=self.actors["LEAD"], project=self.project,
            order=services.ReservationOrder((line,), "simulated"), operation_id=op,
        )  # fmt: skip

    def _run_reserve_firm(self, args: Any, op: uuid.UUID) -> None:
        """As an app does that holds and approves in a transaction of its own."""
        actor, until = self.actors["LEAD"], clock.today() + timedelta(days=14)

        def body() -> None:
            made = services.hold_lines(
                actor=actor, project_id=self.project.pk, purpose="simulated", expires_on=until,
                operation="reservation.make", operation_id=op,
                lines=[
                    services.HoldLine(code, amount, str(amount), "ug")
                    for code, amount in args["lines"]
                ],
            )  # fmt: skip
            services.make_firm(actor=actor, code=made.code, expires_on=until)

        services.write_once(body, operation_id=op, once=None, earlier=lambda operation: None)

    def _run_use(self, args: Any, op: uuid.UUID) -> None:
        actual = services.Actual(
            args["line"], own(args["amount"]), args["bottle"], closes=args["closes"]
        )
        services.use_reservation(
            actor=self.actors["LEAD"], code=uuid.UUID(args["reservation"]), actuals=[actual],
            operation_id=op,
        )  # fmt: skip

    def _run_release(self, args: Any, op: uuid.UUID) -> None:
        services.give_back(
            actor=self.actors["LEAD"], code=uuid.UUID(args["reservation"]), reason="simulated",
            check_version=_any_version, operation_id=op,
        )  # fmt: skip

    def _run_extend(self, args: Any, op: uuid.UUID) -> None:
        services.extend_reservation(
            actor=self.actors["LEAD"], code=uuid.UUID(args["reservation"]),
            expires_on=clock.today() + timedelta(days=30), check_version=_any_version,
        )  # fmt: skip

    def _move(self, kind: str, args: Any, op: uuid.UUID, **more: Any) -> None:
        asked = own(args["amount"]) if "amount" in args else None
        services.move_bottle(
            actor=self.actors["LEAD"], bottle_code=args["bottle"], project=self.project,
            order=services.MovementOrder(kind, asked, "simulated", **more), operation_id=op,
        )  # fmt: skip

    def _run_take(self, args: Any, op: uuid.UUID) -> None:
        self._move("use", args, op)

    def _run_loss(self, args: Any, op: uuid.UUID) -> None:
        self._move("loss", args, op)

    def _run_return(self, args: Any, op: uuid.UUID) -> None:
        self._move("return", args, op)

    def _run_break(self, args: Any, op: uuid.UUID) -> None:
        self._move("loss", args, op, is_broken=True)

    def _run_transfer(self, args: Any, op: uuid.UUID) -> None:
        self._move("transfer", args, op, place_code=args["place"])

    def _run_count(self, args: Any, op: uuid.UUID) -> None:
        count = services.Count(
            args["bottle"], content=own(args["found"]), uncertainty_ug=args["uncertainty"]
        )
        services.count_bottles(actor=self.actors["STOCK_KEEPER"], counts=[count], operation_id=op)

    def _run_decant(self, args: Any, op: uuid.UUID) -> None:
        order = services.DecantOrder(args["code"], own(args["amount"]), args["place"])
        services.decant(
            actor=self.actors["LEAD"], bottle_code=args["bottle"], order=order,
            project=self.project, operation_id=op,
        )  # fmt: skip

    def _run_status(self, args: Any, op: uuid.UUID) -> None:
        services.set_bottle_status(
            actor=self.actors["STOCK_KEEPER"], bottle_code=args["bottle"], status=args["status"],
            reason="simulated", check_version=lambda bottle: None, operation_id=op,
        )  # fmt: skip


def own(amount_ug: int) -> Asked:
    return Asked("mass_mg", Decimal(amount_ug) / 1000)


def _any_version(reservation: Reservation) -> None:
    return None
