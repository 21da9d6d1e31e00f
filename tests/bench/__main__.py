"""Run all measurements and print one table."""

import gc
import statistics
import time
from collections.abc import Callable
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
from tests.shelf import AS_OF, demo_shelf
from tests.targets import OCTYL_GLUCOSIDE

ROUNDS = 200
PLANS_BEFORE_MEMORY = 50
SCALE = Scale(product_mass_mg=2000.0)


def plan_once() -> None:
    """The whole engine on the demo target: read, cut, plan, write the document's bytes."""
    plan = make_plan(read_target(OCTYL_GLUCOSIDE), SCALE, demo_shelf(), as_of=AS_OF)
    canonical_bytes(plan_document(plan, as_of=AS_OF))


def plan_cold() -> None:
    """The same with the structures described afresh, as for a target never seen."""
    structures._describe.cache_clear()
    plan_once()


def bare_rdkit() -> None:
    """What RDKit itself needs for target, donor and acceptor: parse, canonical SMILES, InChIKey."""
    target = read_target(OCTYL_GLUCOSIDE)
    for smiles in (OCTYL_GLUCOSIDE, target.donor.smiles, target.acceptor.smiles):
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


def memory_mb() -> float | None:
    """Proportional set size of this process; None where the system does not tell."""
    source = Path("/proc/self/smaps_rollup")
    if not source.exists():
        return None
    line = next(row for row in source.read_text().splitlines() if row.startswith("Pss:"))
    return int(line.split()[1]) / 1024


def main() -> None:
    for _ in range(PLANS_BEFORE_MEMORY):
        plan_once()
    memory = memory_mb()
    table = Table("measured", "median", "beside it", "median", "ratio")
    bare = median_ms(bare_rdkit)
    for name, work in (
        ("engine, structures known", plan_once),
        ("engine, structures new", plan_cold),
    ):
        took = median_ms(work)
        table.add_row(
            name, f"{took:.2f} ms", "bare RDKit, three structures", f"{bare:.2f} ms",
            f"{took / bare:.1f}",
        )  # fmt: skip
    if memory is not None:
        label = f"engine's process after {PLANS_BEFORE_MEMORY} plans (PSS)"
        table.add_row(label, f"{memory:.0f} MB", "", "", "")
    Console().print(table)


if __name__ == "__main__":
    main()
