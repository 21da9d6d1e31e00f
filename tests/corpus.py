"""Every sugar with every acceptor and promoter of the demo shelf, for the tests of the routes."""

from collections.abc import Iterator
from dataclasses import replace
from functools import cache
from itertools import product

from labplan.chemistry.coupling import Target, read_target
from labplan.planning.plan import Plan, make_plan
from labplan.planning.values import Scale, ShelfBottle, Stage, Wishes
from tests.shelf import AS_OF, demo_shelf

# The 1,2-trans glycosides with free hydroxyls; the aglycone stands in the first brackets.
SUGARS = {
    "D-glucose": "O({})[C@@H]1O[C@H](CO)[C@@H](O)[C@H](O)[C@H]1O",
    "D-galactose": "O({})[C@@H]1O[C@H](CO)[C@H](O)[C@H](O)[C@H]1O",
    "D-mannose": "O({})[C@H]1O[C@H](CO)[C@@H](O)[C@H](O)[C@@H]1O",
    "D-xylose": "O({})[C@@H]1OC[C@@H](O)[C@H](O)[C@H]1O",
    "L-rhamnose": "O({})[C@@H]1O[C@@H](C)[C@H](O)[C@@H](O)[C@H]1O",
    "lactose": "O({})[C@@H]1O[C@H](CO)[C@@H](O[C@@H]2O[C@H](CO)[C@H](O)[C@H](O)[C@H]2O)"
    "[C@H](O)[C@H]1O",
}
FMOC, CBZ = "NC(=O)OCC3c4ccccc4-c4ccccc43", "NC(=O)OCc3ccccc3"
# The bottle -> what it puts on the sugar, from the carbon that carries the hydroxyl.
ALCOHOLS = {
    "PEN-1": "CCCC=C", "OCT-1": "CCCCCCCC", "DEC-1": "CCCCCCCCCC", "DOD-1": "CCCCCCCCCCCC",
    "BNA-1": "Cc3ccccc3", "ALL-1": "CC=C", "PRO-1": "CC#C", "BRE-1": "CCBr",
    "AZE-1": "CCN=[N+]=[N-]",
}  # fmt: skip
ACIDS = {
    "FSO-1": f"C[C@H]({FMOC})C(=O)O",
    "FTO-1": f"[C@H](C)[C@H]({FMOC})C(=O)O",
}
ESTERS = {
    "FSB-1": f"C[C@H]({FMOC})C(=O)OCc5ccccc5",
    "ZSB-1": f"C[C@H]({CBZ})C(=O)OCc5ccccc5",
}
ACCEPTORS = {**ALCOHOLS, **ACIDS, **ESTERS}
CATALYTIC = ("indium-tribromide", "bismuth-triflate")
PROMOTERS = (None, "boron-trifluoride-diethyl-etherate", *CATALYTIC)
SOLVENTS = ("dichloromethane", "toluene", "acetonitrile")
PERACETATES = {"LOA-1", "GPA-1", "GPA-2", "GAL-1", "MAN-1", "XYL-1", "RHA-1"}
TRAPS = {"DCM-3", "CHL-1", "BFE-2", "CLO-1", "LOA-3", "MS-2"}


@cache
def target_of(sugar: str, acceptor: str, *, free: bool) -> Target:
    target = read_target(SUGARS[sugar].format(ACCEPTORS[acceptor]))
    return target if free else read_target(target.glycoside.smiles)


def shelf_of(kind: str) -> tuple[ShelfBottle, ...]:
    """The demo shelf as it is, without a peracetate, or with plenty of everything."""
    if kind == "no peracetates":
        return tuple(b for b in demo_shelf() if b.code not in PERACETATES)
    if kind == "plenty":
        return tuple(replace(b, usable=b.usable * 20) for b in demo_shelf())
    return demo_shelf()


@cache
def planned(
    sugar: str, acceptor: str, free: bool, wishes: Wishes, shelf: str, milligrams: float
) -> Plan:
    return make_plan(
        target_of(sugar, acceptor, free=free), Scale(product_mass_mg=milligrams), shelf_of(shelf),
        as_of=AS_OF, wishes=wishes,
    )  # fmt: skip


def corpus(sugar: str) -> Iterator[tuple[str, Plan]]:
    """All orders for one sugar: two shelves at 2 g, small and large ones, other solvents."""
    for acceptor, free, promoter in product(ACCEPTORS, (False, True), PROMOTERS):
        wishes = Wishes(promoter)
        for shelf, milligrams in (("demo", 2_000.0), ("no peracetates", 2_000.0)):
            name = f"{acceptor} {'free' if free else 'acetylated'} {promoter} {shelf}"
            yield name, planned(sugar, acceptor, free, wishes, shelf, milligrams)
    for acceptor, free, promoter, milligrams in product(
        ("OCT-1", "PEN-1"), (False, True), PROMOTERS[1:], (300.0, 15_000.0)
    ):
        name = f"{acceptor} {free} {promoter} {milligrams:g} mg"
        yield name, planned(sugar, acceptor, free, Wishes(promoter), "plenty", milligrams)
    for solvent, promoter in product(SOLVENTS, PROMOTERS[1:]):
        wishes = Wishes(promoter, solvent)
        yield f"{solvent} {promoter}", planned(sugar, "OCT-1", True, wishes, "demo", 2_000.0)


def available(sugar: str) -> Iterator[tuple[str, Plan, Stage]]:
    for name, plan in corpus(sugar):
        if plan.route is not None and plan.route.is_available:
            for stage in plan.route.stages:
                yield name, plan, stage
