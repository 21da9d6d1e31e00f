"""Run the measurements and print a table each: all of them, or those that are named.

python -m tests.bench [engine] [workers] [ledger[:MOVEMENTS]] [ledger-postgresql[:MOVEMENTS]]

The last two seal and check a large ledger; they are run only when they are named.
"""

import gc
import json
import statistics
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

from rdkit import Chem
from rdkit.Chem import inchi
from rich.console import Console
from rich.table import Table

from labplan.base.canonical import canonical_bytes
from labplan.chemistry import structures
from labplan.chemistry.coupling import read_target
from labplan.planning.document import plan_document
from labplan.planning.plan import make_plan
from labplan.planning.values import Scale
from tests.bench import ledger, paper, reservations, workers
from tests.shelf import AS_OF, demo_shelf
from tests.targets import PENTENYL_LACTOSIDE

ROUNDS = 200
SCALE = Scale(product_mass_mg=2000.0)
# As in the demo: most of the octaacetate is held by others, so three stages are planned.
SHELF = tuple(
    replace(bottle, usable=1480.0) if bottle.code == "LOA-1" else bottle for bottle in demo_shelf()
)
PLAN = make_plan(read_target(PENTENYL_LACTOSIDE), SCALE, SHELF, as_of=AS_OF)


def plan_once() -> None:
    """The engine on the demo target: read, cut, plan three stages, every method; no drawing."""
    make_plan(read_target(PENTENYL_LACTOSIDE), SCALE, SHELF, as_of=AS_OF)


def document_once() -> None:
    """The document of a plan with its drawings, and its canonical bytes."""
    canonical_bytes(plan_document(PLAN, as_of=AS_OF))


def plan_cold() -> None:
    """The same with the structures described afresh, as for a target never seen."""
    structures._describe.cache_clear()
    plan_once()


def bare_rdkit() -> None:
    """What RDKit itself needs for target, donor and acceptor: parse, canonical SMILES, InChIKey."""
    target = read_target(PENTENYL_LACTOSIDE)
    for smiles in (PENTENYL_LACTOSIDE, target.donor.smiles, target.acceptor.smiles):
        mol = Chem.MolFromSmiles(smiles)
        Chem.MolToSmiles(mol)
        inchi.MolToInchiKey(mol)


def median_ms(work: Callable[[], None]) -> float:
    """Median over ROUNDS runs after a warm-up, the collector off."""
    work()
    gc.disable()
    try:
        times = []
        for _ in range(ROUNDS):
            started = time.perf_counter()
            work()
            times.append(time.perf_counter() - started)
    finally:
        gc.enable()
    return statistics.median(times) * 1000


def memory_mb(kind: str) -> str:
    """PSS of a web process or a worker after its plans; "-" where the system does not tell."""
    if not Path("/proc/self/smaps_rollup").exists():
        return "-"
    ended = subprocess.run(
        [sys.executable, "-m", "tests.bench.memory", kind],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    return f"{ended.stdout.strip()} MB"


def engine() -> Table:
    """Planning, documents, paper and memory."""
    table = Table("measured", "median", "beside it", "median", "ratio")
    bare = median_ms(bare_rdkit)
    for name, work in (
        ("engine: read and plan, structures known", plan_once),
        ("engine: read and plan, structures new", plan_cold),
        ("document with drawings, canonical bytes", document_once),
    ):
        took = median_ms(work)
        table.add_row(
            name, f"{took:.2f} ms", "bare RDKit, three structures", f"{bare:.2f} ms",
            f"{took / bare:.1f}",
        )  # fmt: skip
    for name, took, beside, baseline in paper.rows():
        table.add_row(
            name, f"{took:.0f} ms", beside, f"{baseline:.0f} ms", f"{took / baseline:.1f}"
        )
    for kind in ("web", "worker"):
        table.add_row(f"{kind} process after 50 plans (PSS)", memory_mb(kind), "", "", "")
    return table


def real_workers() -> Table:
    """Queued requests planned by one worker and by two; one request on an idle house."""
    ended = subprocess.run(
        [sys.executable, "-m", "tests.bench.workers"],
        stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True, check=True,
    )  # fmt: skip
    found = json.loads(ended.stdout.splitlines()[-1])
    one, two = statistics.median(found["one_s"]), statistics.median(found["two_s"])
    table = Table("measured (PostgreSQL)", "median", "beside it", "median", "ratio")
    table.add_row(
        f"{workers.REQUESTS} queued requests, one worker", f"{one:.2f} s",
        "two workers", f"{two:.2f} s", f"{found['ratio']:.2f} (median of {workers.RUNS} pairs)",
    )  # fmt: skip
    table.add_row(
        "request to planned, nothing else to do",
        f"{found['latency_ms']:.0f} ms (90 %: {found['latency_p90_ms']:.0f})",
        "planning and settling alone", f"{found['bare_ms']:.0f} ms",
        f"+{found['latency_ms'] - found['bare_ms']:.0f} ms",
    )  # fmt: skip
    idle_ms = found["longest_idle_in_transaction_ms"]
    table.add_row("idle in transaction over 50 ms", f"{idle_ms:.0f} ms" if idle_ms else "never",
                  "", "", "")  # fmt: skip
    return table


def stock() -> Table:
    """Amounts set aside by several clients at once."""
    table = Table("measured", "figure", "beside it", "figure", "ratio")
    for row in reservations.rows():
        table.add_row(*row)
    return table


SECTIONS: dict[str, Callable[[], Table]] = {
    "engine": engine,
    "workers": real_workers,
    "stock": stock,
}


LONG = {"ledger": False, "ledger-postgresql": True}  # whether on PostgreSQL
MOVEMENTS = 1_000_000


def section(name: str) -> Table:
    kind, _, movements = name.partition(":")
    if kind in LONG:
        return ledger.measure(int(movements or MOVEMENTS), on_postgresql=LONG[kind])
    return SECTIONS[kind]()


def main(wanted: list[str]) -> None:
    if unknown := {name.partition(":")[0] for name in wanted} - {*SECTIONS, *LONG}:
        sys.exit(f"no measurement {', '.join(unknown)}; there are: {', '.join([*SECTIONS, *LONG])}")
    for name in wanted or SECTIONS:
        Console(width=120).print(section(name))


if __name__ == "__main__":
    main(sys.argv[1:])
