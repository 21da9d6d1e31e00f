"""Documents and views of sheets for tests, planned on the demo shelf without a database."""

import json
from functools import cache
from typing import Any

from labplan.base.canonical import canonical_bytes
from labplan.chemistry.coupling import read_target
from labplan.planning.document import plan_document
from labplan.planning.plan import make_plan
from labplan.planning.values import Scale, Wishes
from labplan.procedures.sheet.model import Heading, sheet_view
from tests.shelf import AS_OF, demo_shelf
from tests.targets import OCTYL_GLUCOSIDE

LACTOSIDE = (
    "C=CCCCO[C@@H]1O[C@H](CO)[C@@H](O[C@@H]2O[C@H](CO)[C@H](O)[C@H](O)[C@H]2O)[C@H](O)[C@H]1O"
)
AZIDOETHYL = "CC(=O)OC[C@H]1O[C@@H](OCCN=[N+]=[N-])[C@H](OC(C)=O)[C@@H](OC(C)=O)[C@@H]1OC(C)=O"
BF3 = "boron-trifluoride-diethyl-etherate"


@cache
def _stored(smiles: str, mass_mg: float, promoter: str | None, without: str) -> bytes:
    shelf = tuple(b for b in demo_shelf() if not (without and b.substance == without))
    plan = make_plan(
        read_target(smiles), Scale(product_mass_mg=mass_mg), shelf, as_of=AS_OF,
        wishes=Wishes(promoter=promoter),
    )  # fmt: skip
    return canonical_bytes(plan_document(plan, as_of=AS_OF))


def document(
    smiles: str, mass_mg: float = 2000.0, *, promoter: str | None = None, without: str = ""
) -> dict[str, Any]:
    """The document as it is read back from its stored bytes; a new one every time."""
    read: dict[str, Any] = json.loads(_stored(smiles, mass_mg, promoter, without))
    return read


def lactoside() -> dict[str, Any]:
    """Three stages: the shelf has too little of the octaacetate."""
    return document(LACTOSIDE)


def octyl() -> dict[str, Any]:
    return document(OCTYL_GLUCOSIDE)


def refused() -> dict[str, Any]:
    return document(OCTYL_GLUCOSIDE.replace("O[C@@H]1O", "O[C@H]1O"))


def short() -> dict[str, Any]:
    return document(OCTYL_GLUCOSIDE, promoter=BF3, without=BF3)


def view(stored: dict[str, Any], **changes: str) -> dict[str, Any]:
    values = {
        "code": "P-7K2M4Q9X", "state": "planned", "project_code": "LECTIN-07",
        "project_title": "Lectin probes", "requested_by": "MIRA",
        "requested_by_name": "Mira Example", "scale": "2.000 g of product", "sha256": "ab" * 32,
        **changes,
    }  # fmt: skip
    return sheet_view(stored, Heading(**values))
