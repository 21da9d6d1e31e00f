"""Structures the tests of the API ask for."""


def glucoside(aglycone: str) -> str:
    """The beta glucoside, all acetyl; `aglycone` starts at its carbon, its rings at 2."""
    return (
        f"CC(=O)OC[C@H]1O[C@@H](O{aglycone})[C@H](OC(C)=O)[C@@H](OC(C)=O)[C@@H]1OC(C)=O"
    )  # fmt: skip


OCTYL = "CCCCCCCC"
ALPHA_OCTYL = "CC(=O)OC[C@H]1O[C@H](OCCCCCCCC)[C@H](OC(C)=O)[C@@H](OC(C)=O)[C@@H]1OC(C)=O"
OPEN_ANOMER = "CC(=O)OC[C@H]1OC(OCCCCCCCC)[C@H](OC(C)=O)[C@@H](OC(C)=O)[C@@H]1OC(C)=O"
OPEN_C3 = "CC(=O)OC[C@H]1O[C@@H](OCCCCCCCC)[C@H](OC(C)=O)C(OC(C)=O)[C@@H]1OC(C)=O"
ALPHA_MANNOSIDE = "CC(=O)OC[C@H]1O[C@H](OCCCCCCCC)[C@@H](OC(C)=O)[C@@H](OC(C)=O)[C@@H]1OC(C)=O"
BETA_MANNOSIDE = "CC(=O)OC[C@H]1O[C@@H](OCCCCCCCC)[C@@H](OC(C)=O)[C@@H](OC(C)=O)[C@@H]1OC(C)=O"
FREE_OCTYL = "OC[C@H]1O[C@@H](OCCCCCCCC)[C@H](O)[C@@H](O)[C@@H]1O"
GLCNAC = "CC(=O)OC[C@H]1O[C@@H](OCCCCCCCC)[C@H](NC(C)=O)[C@@H](OC(C)=O)[C@@H]1OC(C)=O"
FMOC = "NC(=O)OCC3c4ccccc4-c4ccccc43"
# pent-4-en-1-yl beta-lactoside, the target of the demo, and the octyl heptaacetate
LACTOSIDE_FREE = (
    "C=CCCCO[C@@H]1O[C@H](CO)[C@@H](O[C@@H]2O[C@H](CO)[C@H](O)[C@H](O)[C@H]2O)[C@H](O)[C@H]1O"
)
CELLOBIOSIDE_FREE = LACTOSIDE_FREE.replace("[C@H](O)[C@H](O)[C@H]2O", "[C@@H](O)[C@H](O)[C@H]2O")
PARTLY_ACETYLATED = "CC(=O)OC[C@H]1O[C@@H](OCCCCCCCC)[C@H](O)[C@@H](O)[C@@H]1O"
FUCOSIDE_FREE = "C[C@@H]1O[C@@H](OCCCCCCCC)[C@@H](O)[C@H](O)[C@@H]1O"
BETA_MANNOSIDE_FREE = "OC[C@H]1O[C@@H](OCCCC=C)[C@@H](O)[C@@H](O)[C@@H]1O"
FUCOSIDE = "C[C@@H]1O[C@@H](OCCCCCCCC)[C@@H](OC(C)=O)[C@H](OC(C)=O)[C@@H]1OC(C)=O"
LACTOSIDE = (
    "CC(=O)OC[C@H]1O[C@@H](O[C@H]2[C@H](OC(C)=O)[C@@H](OC(C)=O)[C@H](OCCCCCCCC)O[C@@H]2COC(C)=O)"
    "[C@H](OC(C)=O)[C@@H](OC(C)=O)[C@H]1OC(C)=O"
)
FREE_SUGAR = "OC[C@H]1O[C@@H](O)[C@H](O)[C@@H](O)[C@@H]1O"
PERACETATE = "CC(=O)OC[C@H]1O[C@@H](OC(C)=O)[C@H](OC(C)=O)[C@@H](OC(C)=O)[C@@H]1OC(C)=O"
