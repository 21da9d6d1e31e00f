"""Structures as SVG: the same text every time, nothing cut, the stereo centres kept."""

import re
import subprocess
import sys

import pytest
from rdkit import Chem

from labplan.chemistry.coupling import read_target
from labplan.chemistry.drawing import draw, lay_out
from labplan.planning.document import plan_document
from labplan.planning.plan import make_plan
from labplan.planning.values import Scale
from tests.shelf import AS_OF, demo_shelf
from tests.targets import OCTYL_GLUCOSIDE

LACTOSIDE = (
    "C=CCCCO[C@@H]1O[C@H](CO)[C@@H](O[C@@H]2O[C@H](CO)[C@H](O)[C@H](O)[C@H]2O)[C@H](O)[C@H]1O"
)
FMOC_SERINE = (
    "O=C(N[C@@H](CO[C@@H]1O[C@H](COC(C)=O)[C@H](OC(C)=O)[C@H](OC(C)=O)[C@H]1OC(C)=O)C(=O)O)"
    "OCC1c2ccccc2-c2ccccc12"
)
RHAMNOSIDE = "CCCCCCCCO[C@@H]1O[C@@H](C)[C@H](OC(C)=O)[C@@H](OC(C)=O)[C@H]1OC(C)=O"
STRUCTURES = (LACTOSIDE, OCTYL_GLUCOSIDE, FMOC_SERINE, RHAMNOSIDE, "C=CCCCO", "C")


def parts(smiles: str) -> tuple[str, ...]:
    target = read_target(smiles)
    return (target.donor.smiles, target.glycoside.smiles, target.structure.smiles)


@pytest.mark.parametrize(
    ("smiles", "without_short_groups"),
    [
        (LACTOSIDE, LACTOSIDE),
        (OCTYL_GLUCOSIDE, OCTYL_GLUCOSIDE.replace("OC(C)=O", "O")),
        (RHAMNOSIDE, RHAMNOSIDE.replace("OC(C)=O", "O")),
        (
            FMOC_SERINE,
            "N[C@@H](CO[C@@H]1O[C@H](CO)[C@H](O)[C@H](O)[C@H]1O)C(=O)O",
        ),
        ("C=CCCCO", "C=CCCCO"),
    ],
)
def test_a_drawing_reads_back_with_every_stereo_centre(
    smiles: str, without_short_groups: str
) -> None:
    """From places and wedges alone, by a mol file; OAc read as OH and NHFmoc as NH2."""
    laid_out = lay_out(Chem.MolFromSmiles(smiles))
    read = Chem.RWMol(Chem.MolFromMolBlock(Chem.MolToMolBlock(laid_out)))
    for drawn, atom in zip(laid_out.GetAtoms(), read.GetAtoms(), strict=True):
        if drawn.HasProp("atomLabel"):
            atom.SetAtomicNum({"OAc": 8, "NHFmoc": 7}[drawn.GetProp("atomLabel")])
            atom.SetNoImplicit(False)
    assert Chem.CanonSmiles(Chem.MolToSmiles(read)) == Chem.CanonSmiles(without_short_groups)


@pytest.mark.parametrize("smiles", STRUCTURES)
def test_nothing_lies_outside_the_drawing(smiles: str) -> None:
    drawing = draw(smiles)
    width, height = map(int, re.search(r'width="(\d+)" height="(\d+)"', drawing.svg).groups())  # type: ignore[union-attr]
    points = [
        tuple(map(float, pair))
        for path in re.findall(r' d="([^"]*)"', drawing.svg)
        for pair in re.findall(r"(-?[\d.]+) (-?[\d.]+)", re.sub(r"[A-Z]", " ", path))
    ]
    assert points
    assert all(0 <= x <= width and 0 <= y <= height for x, y in points)


@pytest.mark.parametrize("smiles", STRUCTURES)
def test_only_black_is_drawn_and_nothing_is_fetched(smiles: str) -> None:
    svg = draw(smiles).svg
    assert set(re.findall(r'(?:fill|stroke)="([^"]*)"', svg)) <= {"none", "#000000"}
    assert set(re.findall(r"<(\w+)", svg)) == {"svg", "path"}
    assert svg.count("http") == svg.count('xmlns="http://www.w3.org/2000/svg"') == 1


@pytest.mark.parametrize("smiles", [LACTOSIDE, OCTYL_GLUCOSIDE, FMOC_SERINE, RHAMNOSIDE])
def test_the_coupled_sugar_lies_the_same_way_in_the_whole_scheme(smiles: str) -> None:
    """Ring oxygen at the upper right, C-1 at the lower right, in donor, glycoside and target."""
    for structure in parts(smiles):
        mol = lay_out(Chem.MolFromSmiles(structure))
        placed = {a.GetIntProp("labplan_place"): mol.GetConformer().GetAtomPosition(a.GetIdx())
                  for a in mol.GetAtoms() if a.HasProp("labplan_place")}  # fmt: skip
        oxygen, c1, c2, _, c4, c5 = (placed[place] for place in range(6))
        assert (round(oxygen.x, 2), round(oxygen.y, 2)) == (1.30, 0.75)
        assert (round(c1.x, 2), round(c1.y, 2)) == (1.30, -0.75)
        assert (round(c4.x, 2), round(c4.y, 2)) == (-1.30, 0.75)
        assert (round(c2.y, 2), round(c5.y, 2)) == (-1.5, 1.5)


def test_an_alcohol_comes_with_its_hydroxyl_first() -> None:
    mol = lay_out(Chem.MolFromSmiles("C=CCCCO"))
    across = [mol.GetConformer().GetAtomPosition(i).x for i in range(mol.GetNumAtoms())]
    assert across[5] == min(across)


def test_bonds_are_as_long_in_a_small_structure_as_in_a_large_one() -> None:
    """A bond is 1.5 angstrom of 18 pixels; the longest line drawn is a whole bond."""
    assert [_longest_plain_bond(s) for s in ("CCCC", "CCCCCCCC", OCTYL_GLUCOSIDE)] == [27, 27, 27]


def _longest_plain_bond(smiles: str) -> int:
    lengths = []
    for path in re.findall(r' d="M ([\d. L]+)"', draw(smiles).svg):
        x1, y1, x2, y2 = map(float, path.replace("L", " ").split()[:4])
        lengths.append(((x1 - x2) ** 2 + (y1 - y2) ** 2) ** 0.5)
    return round(max(lengths))


def test_two_processes_draw_the_same_text() -> None:
    command = (
        "from labplan.chemistry.drawing import draw;"
        f"print(''.join(draw(s).svg for s in {STRUCTURES!r}))"
    )
    first, second = (
        subprocess.run(
            [sys.executable, "-c", command], env={"PYTHONHASHSEED": seed, "PATH": ""},
            capture_output=True, text=True, check=True, timeout=60,
        ).stdout
        for seed in ("1", "2")
    )  # fmt: skip
    assert first == second
    assert first.strip() == "".join(draw(smiles).svg for smiles in STRUCTURES)


def test_an_unreadable_structure_is_an_error() -> None:
    with pytest.raises(ValueError, match="unreadable"):
        draw("C1CC")


def document(smiles: str) -> dict[str, object]:
    plan = make_plan(read_target(smiles), Scale(product_mass_mg=2000.0), demo_shelf(), as_of=AS_OF)
    return plan_document(plan, as_of=AS_OF)


@pytest.mark.parametrize(
    ("smiles", "keys"),
    [
        (OCTYL_GLUCOSIDE, ["donor", "acceptor", "glycoside"]),
        (LACTOSIDE, ["donor", "acceptor", "glycoside", "target"]),
        (OCTYL_GLUCOSIDE.replace("O[C@@H]1O", "O[C@H]1O"), ["target"]),  # 1,2-cis, refused
    ],
)
def test_the_document_holds_the_drawings_of_its_scheme(smiles: str, keys: list[str]) -> None:
    drawings = document(smiles)["drawings"]
    assert [drawing["key"] for drawing in drawings] == keys  # type: ignore[attr-defined]
    target = read_target(smiles)
    known = {"donor": target.donor, "acceptor": target.acceptor, "glycoside": target.glycoside,
             "target": target.structure}  # fmt: skip
    for drawing in drawings:  # type: ignore[attr-defined]
        assert drawing["svg"] == draw(known[drawing["key"]].smiles).svg
