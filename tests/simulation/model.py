"""The stock in memory: the same rules in other words, one command after the other."""

from collections import defaultdict
from dataclasses import dataclass, field
from typing import Any

Line = tuple[str, int, int, tuple[str, int] | None]  # kind, on hand, held, hold
HoldKey = tuple[str, int]  # reservation, line


@dataclass
class ModelBottle:
    heel: int
    on_hand: int = 0
    held: int = 0
    lines: int = 0


@dataclass
class ModelHold:
    key: HoldKey
    bottle: str
    amount: int
    made_at: str
    is_firm: bool
    used: int = 0
    given_back: int = 0
    state: str = "open"

    @property
    def left(self) -> int:
        return self.amount - self.used - self.given_back if self.state == "open" else 0


@dataclass
class Model:
    """What each command must write, given what came before it."""

    bottles: dict[str, ModelBottle]
    holds: dict[HoldKey, ModelHold] = field(default_factory=dict)
    by_reservation: dict[str, list[ModelHold]] = field(default_factory=lambda: defaultdict(list))
    # those of a bottle that were open when last looked at
    by_bottle: dict[str, list[ModelHold]] = field(default_factory=lambda: defaultdict(list))
    cancelled: int = 0
    messages: int = 0

    def apply(self, command: dict[str, Any], written: dict[str, list[Line]]) -> None:
        """Work a command out, compare with what was `written` for it (by bottle), and go on."""
        lines = getattr(self, f"_{command['kind']}")(command, written)
        assert lines == written, f"{command}: expected {lines}, the book says {written}"
        for code, found in lines.items():
            bottle = self.bottles[code]
            for _, on_hand_change, held_change, _ in found:
                bottle.on_hand += on_hand_change
                bottle.held += held_change
                bottle.lines += 1
                assert 0 <= bottle.held <= bottle.on_hand, (command, code, bottle)

    # ---- intentions ----

    def _hold(
        self, code: str, at: str, lines: list[tuple[str, int]], *, is_firm: bool
    ) -> dict[str, list[Line]]:
        made: dict[str, list[Line]] = defaultdict(list)
        for number, (bottle, amount) in enumerate(lines, start=1):
            hold = ModelHold((code, number), bottle, amount, at, is_firm)
            self.holds[hold.key] = hold
            self.by_reservation[code].append(hold)
            self.by_bottle[bottle].append(hold)
            made[bottle].append(("hold", 0, amount, hold.key))
        for bottle, held in made.items():
            there = self.bottles[bottle]
            total = sum(line[2] for line in held)
            assert there.on_hand - there.held - total >= there.heel, f"oversold: {bottle}"
        return dict(made)

    def _reserve(self, command: dict[str, Any], written: Any) -> dict[str, list[Line]]:
        return self._hold(
            command["made"], command["at"], [tuple(line) for line in command["args"]["lines"]],
            is_firm=command["kind"] == "reserve_firm",
        )  # fmt: skip

    _reserve_firm = _reserve

    def _reserve_substance(self, command: dict[str, Any], written: Any) -> dict[str, list[Line]]:
        """Which bottles were free when it looked is not known; that it adds up is."""
        parts = sorted(
            (line[3][1], bottle, line[2]) for bottle, lines in written.items() for line in lines
        )
        assert sum(amount for _, _, amount in parts) == command["args"]["amount"], command
        return self._hold(
            command["made"], command["at"], [(bottle, amount) for _, bottle, amount in parts],
            is_firm=False,
        )  # fmt: skip

    def _decant(self, command: dict[str, Any], written: Any) -> dict[str, list[Line]]:
        args = command["args"]
        parent, amount = self.bottles[args["bottle"]], args["amount"]
        assert parent.on_hand - parent.held - amount >= parent.heel, f"oversold: {command}"
        self.bottles[args["code"]] = ModelBottle(heel=min(20_000, amount))
        return {
            args["bottle"]: [("decant_out", -amount, 0, None)],
            args["code"]: [("decant_in", amount, 0, None)],
        }

    def _release(self, command: dict[str, Any], written: Any) -> dict[str, list[Line]]:
        made: dict[str, list[Line]] = defaultdict(list)
        for hold in self.by_reservation[command["args"]["reservation"]]:
            if hold.left:
                made[hold.bottle].append(("release", 0, -hold.left, hold.key))
                hold.given_back += hold.left
                hold.state = "released"
        self.messages += 1
        return dict(made)

    # ---- facts ----

    def _use(self, command: dict[str, Any], written: Any) -> dict[str, list[Line]]:
        args = command["args"]
        hold = self.holds[(args["reservation"], args["line"])]
        bottle, amount, left = args["bottle"] or hold.bottle, args["amount"], hold.left
        back: dict[str, list[Line]] = defaultdict(list)
        from_hold = 0
        if bottle == hold.bottle:
            from_hold = min(left, amount)
            hold.used += from_hold
            rest = left - from_hold if args["closes"] else 0
        else:
            rest = left if args["closes"] else min(left, amount)
        if rest:
            back[hold.bottle].append(("release", 0, -rest, hold.key))
            hold.given_back += rest
        if left and hold.left == 0:
            hold.state = "used"
        return self._fact(bottle, ("use", -amount, -from_hold, hold.key), back)

    def _take(self, command: dict[str, Any], written: Any) -> dict[str, list[Line]]:
        args = command["args"]
        return self._fact(args["bottle"], ("use", -args["amount"], 0, None), {})

    def _loss(self, command: dict[str, Any], written: Any) -> dict[str, list[Line]]:
        args = command["args"]
        return self._fact(args["bottle"], ("loss", -args["amount"], 0, None), {})

    def _break(self, command: dict[str, Any], written: Any) -> dict[str, list[Line]]:
        code = command["args"]["bottle"]
        return self._fact(code, ("loss", -self.bottles[code].on_hand, 0, None), {}, keeps_none=True)

    def _return(self, command: dict[str, Any], written: Any) -> dict[str, list[Line]]:
        args = command["args"]
        return {args["bottle"]: [("return", args["amount"], 0, None)]}

    def _transfer(self, command: dict[str, Any], written: Any) -> dict[str, list[Line]]:
        return {command["args"]["bottle"]: [("transfer", 0, 0, None)]}

    def _count(self, command: dict[str, Any], written: Any) -> dict[str, list[Line]]:
        args = command["args"]
        change = args["found"] - self.bottles[args["bottle"]].on_hand
        assert abs(change) > args["uncertainty"], command
        assert 100 * abs(change) >= self.bottles[args["bottle"]].on_hand, command
        return self._fact(args["bottle"], ("correction", change, 0, None), {})

    def _status(self, command: dict[str, Any], written: Any) -> dict[str, list[Line]]:
        assert command["args"]["status"] == "quarantined", command
        return self._fact(command["args"]["bottle"], None, {}, keeps_none=True)

    def _fact(
        self, code: str, line: Line | None, back: dict[str, list[Line]], *,
        keeps_none: bool = False,
    ) -> dict[str, list[Line]]:  # fmt: skip
        """The line itself; before it what had to give way: firm and early holds stay longest."""
        bottle, made = self.bottles[code], {name: list(lines) for name, lines in back.items()}
        on_hand = bottle.on_hand + (line[1] if line else 0)
        held = bottle.held + (line[2] if line else 0) + sum(x[2] for x in back.get(code, []))
        first: list[Line] = []
        if on_hand < 0:
            first.append(("correction", -on_hand, 0, None))
            on_hand = 0
        given_up = []
        for hold in self._given_up_first(code):
            if held <= on_hand and not keeps_none:
                break
            given_up.append(("release", 0, -hold.left, hold.key))
            held -= hold.left
            hold.given_back += hold.left
            hold.state = "cancelled"
        self.cancelled += len(given_up)
        self.messages += len({key[0] for _, _, _, key in given_up})
        out = [line] if line and line[1] < 0 else []
        up = [line] if line and line[1] > 0 else []
        made[code] = [*first, *up, *made.get(code, []), *given_up, *out]
        return {name: lines for name, lines in made.items() if lines}

    def _given_up_first(self, code: str) -> list[ModelHold]:
        there = self.by_bottle[code] = [hold for hold in self.by_bottle[code] if hold.left]
        there = list(there)
        there.sort(key=lambda hold: hold.key[1], reverse=True)
        there.sort(key=lambda hold: hold.made_at, reverse=True)
        return sorted(there, key=lambda hold: hold.is_firm)
