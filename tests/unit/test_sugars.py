"""Reading sugar rings: what is found follows from the compound's name, never from R and S."""

import json
import re
from pathlib import Path

import pytest
from rdkit import Chem

from labplan.chemistry.sugars import SugarRing, find_sugar_rings

DATA = json.loads((Path(__file__).parents[1] / "data" / "sugars_by_name.json").read_text())
SMILES = {row["name"]: row["smiles"] for row in DATA["compounds"]}
NAMED = [name for name in SMILES if re.search(r"-(alpha|beta)-[DL]-[a-z]+pyran", name)]
# O-2 on the right of the Fischer projection (D): beta is 1,2-trans; on the left: alpha.
RIGHT = {"allo", "gluco", "gulo", "galacto", "fuco", "ribo", "xylo"}
LEFT = {"altro", "manno", "rhamno", "ido", "talo", "arabino", "lyxo"}
PARENT = {"rhamno": "manno", "fuco": "galacto"}


def rings(smiles: str) -> tuple[SugarRing, ...]:
    return find_sugar_rings(Chem.MolFromSmiles(smiles))


@pytest.mark.parametrize("name", NAMED)
def test_series_configuration_anomer_and_relation_follow_from_the_name(name: str) -> None:
    found = re.search(r"-(alpha|beta)-([DL])-([a-z]+?)pyran", name)
    assert found is not None
    anomer, series, stem = found.groups()
    (ring,) = rings(SMILES[name])
    assert (ring.anomer, ring.series) == (anomer, series)
    assert ring.configuration == PARENT.get(stem, stem)
    trans_anomer = "beta" if stem in RIGHT else "alpha"
    assert ring.relation == ("1,2-trans" if anomer == trans_anomer else "1,2-cis")


def test_the_named_compounds_cover_both_series_and_both_sides() -> None:
    stems = {re.search(r"-[DL]-([a-z]+?)pyran", name).group(1) for name in NAMED}  # type: ignore[union-attr]
    assert stems >= {"gluco", "galacto", "manno", "xylo", "rhamno", "fuco", "arabino", "ribo"}
    assert stems <= RIGHT | LEFT
    assert len(NAMED) == 21


@pytest.mark.parametrize(
    ("name", "inner", "reducing"),
    [
        ("Octa-O-acetyl-alpha-lactose", ("galacto", "beta"), ("gluco", "alpha")),
        ("Octa-O-acetyl-beta-lactose", ("galacto", "beta"), ("gluco", "beta")),
        ("Octa-O-acetyl-beta-maltose", ("gluco", "alpha"), ("gluco", "beta")),
        ("Octa-O-acetyl-alpha-cellobiose", ("gluco", "beta"), ("gluco", "alpha")),
        ("Octa-O-acetyl-beta-gentiobiose", ("gluco", "beta"), ("gluco", "beta")),
        ("Octa-O-acetyl-beta-melibiose", ("galacto", "alpha"), ("gluco", "beta")),
    ],
)
def test_both_rings_of_a_disaccharide_are_read(
    name: str, inner: tuple[str, str], reducing: tuple[str, str]
) -> None:
    mol = Chem.MolFromSmiles(SMILES[name])
    found = find_sugar_rings(mol)
    carries_acetate = {
        ring: mol.GetAtomWithIdx(ring.aglycone_atom).GetDegree() == 3
        and any(
            b.GetBondTypeAsDouble() == 2 for b in mol.GetAtomWithIdx(ring.aglycone_atom).GetBonds()
        )
        for ring in found
        if ring.aglycone_atom is not None
    }
    by_role = {
        carries: (ring.configuration, ring.anomer) for ring, carries in carries_acetate.items()
    }
    assert by_role == {False: inner, True: reducing}


def test_the_mirror_image_keeps_name_and_relation_and_changes_series() -> None:
    for name in NAMED:
        smiles = SMILES[name]
        mirrored = re.sub("@+", lambda m: "@" if m.group() == "@@" else "@@", smiles)
        (ring,), (other,) = rings(smiles), rings(mirrored)
        assert (other.configuration, other.anomer, other.relation) == (
            ring.configuration,
            ring.anomer,
            ring.relation,
        )
        assert {ring.series, other.series} == {"D", "L"}


def test_the_written_order_of_atoms_does_not_matter() -> None:
    mol = Chem.MolFromSmiles(SMILES["Penta-O-acetyl-alpha-D-mannopyranose"])
    facts = set()
    for seed in range(40):
        (ring,) = rings(
            Chem.MolToSmiles(mol, doRandom=True, canonical=False, rootedAtAtom=seed % 27)
        )
        facts.add((ring.series, ring.configuration, ring.anomer, ring.relation))
    assert facts == {("D", "manno", "alpha", "1,2-trans")}


@pytest.mark.parametrize(
    "smiles",
    [
        "C1CCOCC1",  # tetrahydropyran
        "OC1CCCCO1",  # 2-hydroxytetrahydropyran: no oxygens at C-2 to C-4
        "O=C1C=COC=C1",  # pyranone
        "OC1COC(O)C1",  # a five-membered ring
        "OC1OC(O)CCC1O",  # two anomeric carbons
    ],
)
def test_rings_that_are_no_sugar_are_not_taken_for_one(smiles: str) -> None:
    assert rings(smiles) == ()


def test_a_deoxy_sugar_is_described_and_not_named() -> None:
    # methyl 2-deoxy-beta-D-arabino-hexopyranoside: no substituent at C-2
    (ring,) = rings("CO[C@H]1C[C@@H](O)[C@H](O)[C@@H](CO)O1")
    assert ring.c2_substituent == "H"
    assert ring.relation == "none"
    assert ring.residue is None


def test_an_open_anomeric_centre_is_said() -> None:
    (ring,) = rings("CCOC1O[C@H](CO)[C@@H](O)[C@H](O)[C@H]1O")
    assert ring.anomeric_carbon in ring.open_centres
    assert ring.anomer is None
    assert ring.relation == "none"


def test_amino_sugars_are_described_by_their_nitrogen() -> None:
    (ring,) = rings(SMILES["N-Acetyl-D-glucosamine (alpha)"])
    assert (ring.c2_substituent, ring.configuration, ring.relation) == ("N", "gluco", "1,2-cis")
    assert ring.residue is None
