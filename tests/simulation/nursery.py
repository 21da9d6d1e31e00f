"""Start processes that run commands, kill them as one pleases, start them again.

Run as a program of its own, which never opens a connection: its children do, after the fork.
What a child is about to do stands in its log before it does it, and what came of it after.
"""

import json
import os
import random
import signal
import sys
import time
import traceback
from pathlib import Path
from typing import Any

# of 100 operations whose answer got lost, so many are sent again
RETRIED_PCT = 80
# of 100 answered operations, so many are sent again all the same
REPEATED_PCT = 3
# of 1,000 operations, so many take their process with them when all is written but the answer
DIES_UNANSWERED_PER_MILLE = 2
# a command with its answer, in the log
BYTES_A_COMMAND = 400
POLL_S = 0.02


def main(arguments: list[str]) -> int:
    import django

    django.setup()
    from tests.simulation import commands  # the imports are done once, before the forks

    folder = Path(arguments[0])
    seed, workers, each, kill_every, limit_s = (int(argument) for argument in arguments[1:])
    assert commands.WEIGHTS
    dice = random.Random(f"{seed}/nursery")
    running = {_start(folder, slot, seed, each): slot for slot in range(workers)}
    end, kills = time.monotonic() + limit_s, 0
    next_kill = _kill_after(dice, kill_every)
    failed = False
    while running:
        time.sleep(POLL_S)
        if time.monotonic() >= end:
            failed = True
            print("out of time", flush=True)
            _kill_all(running)
            break
        # By the work done and not by the time, so that a slow machine kills no more often.
        if _logged(folder) >= next_kill:
            next_kill = _logged(folder) + _kill_after(dice, kill_every)
            os.kill(dice.choice(list(running)), signal.SIGKILL)
        for pid, status in _ended(running):
            slot = running.pop(pid)
            if os.WIFSIGNALED(status) and os.WTERMSIG(status) == signal.SIGKILL:
                kills += 1
                running[_start(folder, slot, seed, each)] = slot
            elif status != 0:
                failed = True
                _kill_all(running)
                running = {}
                break
    print(json.dumps({"kills": kills}), flush=True)
    return 1 if failed else 0


def _kill_after(dice: random.Random, kill_every: int) -> float:
    return dice.uniform(0.5, 1.5) * kill_every * BYTES_A_COMMAND


def _logged(folder: Path) -> int:
    return sum(path.stat().st_size for path in folder.glob("*.log"))


def _ended(running: dict[int, int]) -> list[tuple[int, int]]:
    found = []
    for pid in running:
        ended, status = os.waitpid(pid, os.WNOHANG)
        if ended:
            found.append((ended, status))
    return found


def _kill_all(running: dict[int, int]) -> None:
    for pid in running:
        os.kill(pid, signal.SIGKILL)
        os.waitpid(pid, 0)


def _start(folder: Path, slot: int, seed: int, each: int) -> int:
    pid = os.fork()
    if pid:
        return pid
    try:
        work(folder / f"{slot}.log", slot, seed, each)
    except BaseException:
        traceback.print_exc()
        os._exit(1)
    os._exit(0)


def work(path: Path, slot: int, seed: int, each: int) -> None:
    """Go on where the log ends, to the last command of this slot."""
    from tests.simulation.commands import Bench

    lines = read_log(path)
    log = os.open(path, os.O_WRONLY | os.O_APPEND | os.O_CREAT, 0o600)

    def write(line: dict[str, Any]) -> None:
        os.write(log, (json.dumps(line) + "\n").encode())

    bench = Bench(slot)
    open_command = unanswered(lines)
    done = max((line["number"] for line in lines if "op" in line), default=-1)
    if open_command is not None:
        dice = random.Random(f"{seed}/{slot}/{done}/{len(lines)}")
        if dice.randrange(100) < RETRIED_PCT:
            write({"answer": open_command["op"], "retried": True, **bench.run(open_command)})
        else:
            write({"given_up": open_command["op"]})
    for number in range(done + 1, each):
        command = bench.draw(seed, number)
        write(command)
        answer = bench.run(command)
        dice = random.Random(command["op"])
        if dice.randrange(1000) < DIES_UNANSWERED_PER_MILLE:
            os.kill(os.getpid(), signal.SIGKILL)
        write({"answer": command["op"], **answer})
        if "ok" in answer and dice.randrange(100) < REPEATED_PCT:
            write({"repeated": command["op"], **bench.run(command)})


def read_log(path: Path) -> list[dict[str, Any]]:
    """All whole lines; the last may be cut off where the process was killed."""
    if not path.exists():
        return []
    text = path.read_text(encoding="utf-8")
    whole = text[: text.rfind("\n") + 1]
    if whole != text:
        path.write_text(whole, encoding="utf-8")
    return [json.loads(line) for line in whole.splitlines()]


def unanswered(lines: list[dict[str, Any]]) -> dict[str, Any] | None:
    """The last command, if nothing came of it as far as the log knows."""
    last: dict[str, Any] | None = None
    for line in lines:
        if "op" in line:
            last = line
        elif "answer" in line or "given_up" in line:
            last = None
    return last


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
