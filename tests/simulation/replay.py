"""From the logs and the book to the order in which the operations took effect, and through the
model."""

from collections import defaultdict
from pathlib import Path
from typing import Any

from inventory.models import Balance, Bottle, Hold, Movement, Notice, Reservation
from labplan.base.models import OutboxMessage
from tests.simulation.model import Line, Model, ModelBottle
from tests.simulation.nursery import read_log, unanswered

# What may be answered well without a line in the book: nothing was different.
MAY_WRITE_NOTHING = {"count", "extend", "status", "break"}


class Outcome:
    """What the logs say of each operation."""

    def __init__(self, folder: Path) -> None:
        self.commands: dict[str, dict[str, Any]] = {}
        self.answers: dict[str, dict[str, Any]] = {}
        self.given_up: set[str] = set()
        self.repeated = 0
        for path in sorted(folder.glob("*.log")):
            lines = read_log(path)
            for line in lines:
                if "op" in line:
                    self.commands[line["op"]] = line
                elif "answer" in line:
                    self.answers[line["answer"]] = line
                elif "given_up" in line:
                    self.given_up.add(line["given_up"])
                elif "repeated" in line:
                    self.repeated += 1
                    assert "ok" in line or "busy" in line or _is_over(line), line
            if (last := unanswered(lines)) is not None:
                self.given_up.add(last["op"])

    def count(self, word: str) -> int:
        return sum(word in answer for answer in self.answers.values())


def _is_over(line: dict[str, Any]) -> bool:
    """Without a line in the book there is nothing to know the operation by a second time."""
    return line.get("refused") in {"state_forbids", "invalid_value"}


class Book:
    """The lines of the book by operation and bottle."""

    def __init__(self) -> None:
        self.lines: dict[str, dict[str, list[Line]]] = defaultdict(lambda: defaultdict(list))
        self.made: dict[str, str] = {}
        self.first: dict[str, int] = {}
        books: dict[str, list[str]] = defaultdict(list)
        rows = Movement.objects.order_by("bottle_id", "seq").values_list(
            "id", "operation", "bottle__code", "kind", "on_hand_change", "held_change",
            "hold__reservation__code", "hold__line",
        )  # fmt: skip
        for pk, operation, bottle, kind, on_hand, held, reservation, line in rows.iterator():
            if kind == "receipt":
                continue
            name = str(operation)
            hold = (str(reservation), line) if reservation else None
            self.lines[name][bottle].append((kind, on_hand, held, hold))
            self.first[name] = min(pk, self.first.get(name, pk))
            if kind == "hold":
                self.made[name] = str(reservation)
            if not books[bottle] or books[bottle][-1] != name:
                books[bottle].append(name)
        for bottle, names in books.items():
            assert len(set(names)) == len(names), f"an operation is torn in the book of {bottle}"
            assert names == sorted(names, key=self.first.__getitem__), bottle

    def in_order(self) -> list[str]:
        """The order in which the operations took effect.

        An operation numbers its lines after it has all its locks and keeps these to its end, so
        two that touch the same bottle or reservation are numbered in the order of their commits;
        for the bottles their books say the same. Of any others the order does not matter.
        """
        return sorted(self.lines, key=self.first.__getitem__)


def check(folder: Path) -> dict[str, int]:
    """Replay everything; raise AssertionError where the stock and the model differ."""
    outcome, book = Outcome(folder), Book()
    model = Model(_received())
    unknown = set(book.lines) - set(outcome.commands)
    assert not unknown, f"lines of operations nobody asked for: {unknown}"
    for name in book.in_order():
        command = {**outcome.commands[name], "made": book.made.get(name, "")}
        answer = outcome.answers.get(name)
        assert answer is None or "ok" in answer, f"{answer} but written: {command}"
        written = {bottle: list(lines) for bottle, lines in book.lines[name].items()}
        model.apply(command, written)
    for name, answer in outcome.answers.items():
        if "ok" in answer and name not in book.lines:
            assert outcome.commands[name]["kind"] in MAY_WRITE_NOTHING, outcome.commands[name]
    _compare(model)
    return {
        "commands": len(outcome.commands), "written": len(book.lines),
        "refused": outcome.count("refused"), "busy": outcome.count("busy"),
        "retried": outcome.count("retried"), "unanswered": len(outcome.given_up),
        "of them written": len(outcome.given_up & set(book.lines)),
        "repeated": outcome.repeated, "holds cancelled": model.cancelled,
    }  # fmt: skip


def _received() -> dict[str, ModelBottle]:
    """The bottles as they came: the first line of each book that is a receipt."""
    rows = Movement.objects.filter(kind="receipt").values_list(
        "bottle__code", "bottle__heel", "on_hand_change"
    )
    return {code: ModelBottle(heel, amount, 0, 1) for code, heel, amount in rows}


def _compare(model: Model) -> None:
    there = {
        code: (on_hand, held, seq)
        for code, on_hand, held, seq in Balance.objects.values_list(
            "bottle__code", "on_hand", "held", "seq"
        )
    }
    assert there == {c: (b.on_hand, b.held, b.lines) for c, b in model.bottles.items()}
    holds = {
        (str(code), line): (amount, used, given_back, state)
        for code, line, amount, used, given_back, state in Hold.objects.values_list(
            "reservation__code", "line", "amount", "used", "given_back", "state"
        ).iterator()
    }
    assert holds == {
        key: (hold.amount, hold.used, hold.given_back, hold.state)
        for key, hold in model.holds.items()
    }
    open_ones = {str(code) for code in Reservation.objects.filter(state="open").values_list(
        "code", flat=True)}  # fmt: skip
    assert open_ones == {key[0] for key, hold in model.holds.items() if hold.left}
    assert Notice.objects.count() == model.cancelled
    assert OutboxMessage.objects.filter(topic="stock.holds_cancelled").count() == model.messages
    kept = Hold.objects.filter(state="open").exclude(bottle__status="usable")
    assert not kept.exists(), "something is held of a bottle that may not be used"
    wrong = Bottle.objects.exclude(status="usable").filter(balance__is_usable=True)
    assert not wrong.exists()
