"""Cutting a glycoside: donor, acceptor, and every centre kept."""

import pytest
from hypothesis import given
from hypothesis import strategies as st
from rdkit import Chem

from labplan.chemistry.coupling import read_target
from labplan.chemistry.errors import TargetProblem
from labplan.chemistry.groups import find_groups
from labplan.chemistry.structures import describe_smiles
from tests.targets import OCTYL_GLUCOSIDE

BETA_GLUCOSE_PENTAACETATE = "LPTITAGPBXDDGR-IBEHDNSVSA-N"  # InChIKey, CAS 604-69-3
GLUCOSIDE = "CC(=O)OC[C@H]1O[C@@H](O{})[C@H](OC(C)=O)[C@@H](OC(C)=O)[C@@H]1OC(C)=O"
GALACTOSIDE = "CC(=O)OC[C@H]1O[C@@H](O{})[C@H](OC(C)=O)[C@@H](OC(C)=O)[C@H]1OC(C)=O"


def test_the_octyl_glucoside_is_cut_into_pentaacetate_and_octanol() -> None:
    target = read_target(OCTYL_GLUCOSIDE)
    assert target.name == "octyl 2,3,4,6-tetra-O-acetyl-beta-D-glucopyranoside"
    assert target.donor.inchikey == BETA_GLUCOSE_PENTAACETATE
    assert target.donor_name == "1,2,3,4,6-penta-O-acetyl-beta-D-glucopyranose"
    assert target.acceptor.smiles == "CCCCCCCCO"
    assert (target.residue_name, target.anomer, target.relation) == (
        "D-glucose",
        "beta",
        "1,2-trans",
    )
    assert (target.acceptor_oh, target.acceptor_hydroxyls) == ("primary", 1)
    assert (target.sugar_acetates, target.sugar_hydroxyls, target.other_sugar_groups) == (4, 0, 0)


def test_masses_balance_donor_and_acceptor_give_glycoside_and_acetic_acid() -> None:
    acetic_acid = describe_smiles("CC(=O)O").monoisotopic_mass_da
    for template in (GLUCOSIDE, GALACTOSIDE):
        for aglycone in ("C", "CC=C", "CCN=[N+]=[N-]", "Cc2ccccc2", "CC#C", "CCBr"):
            target = read_target(template.format(aglycone))
            given_mass = target.donor.monoisotopic_mass_da + target.acceptor.monoisotopic_mass_da
            made = target.structure.monoisotopic_mass_da + acetic_acid
            assert given_mass == pytest.approx(made, abs=2e-5)


@pytest.mark.parametrize("mark", ["@", "@@"])
def test_a_stereocentre_next_to_the_cut_keeps_its_configuration(mark: str) -> None:
    """The oxygen ranks first at that carbon on both sides, so its letter must stay the same."""
    glycoside = Chem.MolFromSmiles(GLUCOSIDE.format(f"[C{mark}H](C)CCC"))
    (centre,) = glycoside.GetSubstructMatch(Chem.MolFromSmarts("[CX4H1]([CH3])([CH2][CH2][CH3])O"))[
        :1
    ]
    in_target = dict(Chem.FindMolChiralCenters(glycoside))[centre]
    acceptor = read_target(Chem.MolToSmiles(glycoside)).acceptor
    ((_, in_acceptor),) = Chem.FindMolChiralCenters(Chem.MolFromSmiles(acceptor.smiles))
    assert in_acceptor == in_target


def test_the_donor_keeps_the_face_of_the_anomeric_oxygen() -> None:
    beta = read_target(GLUCOSIDE.format("CC"))
    alpha = read_target(GLUCOSIDE.format("CC").replace("[C@@H](OCC)", "[C@H](OCC)"))
    assert beta.donor.inchikey == BETA_GLUCOSE_PENTAACETATE
    assert alpha.donor.inchikey == "LPTITAGPBXDDGR-LJIZCISZSA-N"  # CAS 604-68-2


@pytest.mark.parametrize(
    ("smiles", "code"),
    [
        ("", "smiles_empty"),
        ("   ", "smiles_empty"),
        ("C1CC", "smiles_unreadable"),
        ("C C", "smiles_unreadable"),
        ("C[N](C)(C)(C)C", "smiles_unreadable"),
        ("C" * 2001, "smiles_too_long"),
        ("C" * 201, "too_many_atoms"),
        (OCTYL_GLUCOSIDE + ".Cl", "several_components"),
        ("CCCCCCCCO", "no_sugar"),
        ("OC[C@H]1O[C@@H](O)[C@H](O)[C@@H](O)[C@@H]1O", "no_glycosidic_bond"),
        (
            "CC(=O)OC[C@H]1O[C@@H](OC(C)=O)[C@H](OC(C)=O)[C@@H](OC(C)=O)[C@@H]1OC(C)=O",
            "no_glycosidic_bond",
        ),
        (GLUCOSIDE.format("CC").replace("[C@@H](OCC)", "C(OCC)"), "undefined_anomeric_centre"),
        (GLUCOSIDE.format("CC").replace("[C@H]1O[", "C1O["), "undefined_sugar_centre"),
        (GLUCOSIDE.format("C(C)CC"), "undefined_centre"),
        (GLUCOSIDE.format("CC[N+](C)(C)C"), "charged"),
        (GLUCOSIDE.format("C[13CH3]"), "isotope"),
        (GLUCOSIDE.format("C*"), "wildcard_atom"),
        (GLUCOSIDE.format("C[CH2]"), "radical"),
    ],
)
def test_what_is_no_defined_glycoside_is_refused_with_its_code(smiles: str, code: str) -> None:
    with pytest.raises(TargetProblem) as refusal:
        read_target(smiles)
    assert refusal.value.code == code
    assert refusal.value.detail.endswith(".")


@given(st.text(max_size=60))
def test_any_text_is_read_or_refused_and_never_breaks(text: str) -> None:
    try:
        target = read_target(text)
    except TargetProblem as problem:
        code = problem.code
    else:
        code = target.structure.inchikey
    assert code


def test_groups_of_the_acceptor_are_found() -> None:
    assert read_target(GLUCOSIDE.format("CC=C")).acceptor_groups == ("alkene",)
    assert read_target(GLUCOSIDE.format("CCN=[N+]=[N-]")).acceptor_groups == ("azide",)
    assert read_target(GLUCOSIDE.format("CCNC(=O)OC(C)(C)C")).acceptor_groups == ("Boc",)
    assert read_target(GLUCOSIDE.format("CC#C")).acceptor_groups == ("alkyne",)
    assert read_target(GLUCOSIDE.format("CCN")).acceptor_groups == ("amine",)
    assert read_target(GLUCOSIDE.format("CCCCC(=O)O")).acceptor_groups == ("carboxylic acid",)


LACTOSIDE = (
    "C=CCCCO[C@@H]1O[C@H](CO)[C@@H](O[C@@H]2O[C@H](CO)[C@H](O)[C@H](O)[C@H]2O)[C@H](O)[C@H]1O"
)


def test_a_free_lactoside_goes_back_to_the_octaacetate_of_lactose() -> None:
    target = read_target(LACTOSIDE)
    assert target.name == "pent-4-en-1-yl beta-lactoside"
    assert target.needs_deacetylation
    assert target.glycoside_name == "pent-4-en-1-yl hepta-O-acetyl-beta-lactoside"
    assert target.glycoside.formula == "C31H44O18"
    assert target.glycoside_acetates == 7
    assert target.donor.inchikey == "WOTQVEKSRLZRSX-HHZNOXSWSA-N"  # CAS 6291-42-5
    assert (target.sugar_hydroxyls, target.sugar_acetates, target.other_sugar_groups) == (7, 0, 0)


@pytest.mark.parametrize(
    ("residue", "smiles"),
    [
        ("D-mannose", "CO[C@H]1O[C@H](CO)[C@@H](O)[C@H](O)[C@@H]1O"),
        ("L-rhamnose", "CO[C@@H]1O[C@@H](C)[C@H](O)[C@@H](O)[C@H]1O"),
        ("D-xylose", "CO[C@@H]1OC[C@@H](O)[C@H](O)[C@H]1O"),
        ("D-galactose", "CO[C@@H]1O[C@H](CO)[C@H](O)[C@H](O)[C@H]1O"),
    ],
)
def test_free_glycosides_of_the_planned_sugars_are_named(residue: str, smiles: str) -> None:
    target = read_target(smiles)
    assert (target.residue_name, target.relation) == (residue, "1,2-trans")


def test_cellobiose_is_not_taken_for_lactose() -> None:
    cellobioside = LACTOSIDE.replace("[C@H](O)[C@H](O)[C@H]2O", "[C@@H](O)[C@H](O)[C@H]2O")
    target = read_target(cellobioside)
    assert target.residue is None
    assert target.structure.formula == read_target(LACTOSIDE).structure.formula


def test_a_protected_serine_is_named_with_the_sugar_on_its_oxygen() -> None:
    serine = "[C@H](NC(=O)OCC2c3ccccc3-c3ccccc32)C(=O)OCc2ccccc2"
    target = read_target(GLUCOSIDE.format(f"C{serine}"))
    assert target.acceptor_name == "N-(9-fluorenylmethoxycarbonyl)-L-serine benzyl ester"
    assert target.name == (
        "N-(9-fluorenylmethoxycarbonyl)-O-(2,3,4,6-tetra-O-acetyl-beta-D-glucopyranosyl)-L-serine "
        "benzyl ester"
    )
    assert target.acceptor_groups == ("Fmoc", "benzyl ester")


def test_numbers_on_atoms_are_no_part_of_the_structure() -> None:
    """All atoms numbered, and one of them: the same target, and no number comes out again."""
    plain = read_target(OCTYL_GLUCOSIDE)
    mol = Chem.MolFromSmiles(OCTYL_GLUCOSIDE)
    for atom in mol.GetAtoms():
        atom.SetAtomMapNum(atom.GetIdx() + 1)
    numbered = Chem.MolToSmiles(mol)
    assert ":17]" in numbered
    assert read_target(numbered) == plain
    assert read_target(OCTYL_GLUCOSIDE.replace("CCCCCCCCO", "[CH3:5]CCCCCCCO", 1)) == plain


@pytest.mark.parametrize(
    ("smiles", "groups"),
    [
        ("OCCCOC(C)=O", {"acyl or alkyl ester"}),
        ("OCCCC(=O)OCC", {"acyl or alkyl ester"}),
        ("OCCC1CCC(=O)O1", {"acyl or alkyl ester"}),
        ("OCCc1ccc(OC(C)=O)cc1", {"acyl or alkyl ester"}),
        ("OCCCC(=O)OC", {"methyl ester"}),
        ("OCCCC(=O)OC(C)(C)C", {"tert-butyl ester or ether"}),
        ("OCCCC(=O)OCc1ccccc1", {"benzyl ester"}),
        ("OCCCC(=O)OCC=C", {"allyl ester", "alkene"}),
        ("OCCCC(=O)O", {"carboxylic acid"}),
        ("OCCNC(=O)OCc1ccccc1", {"Cbz"}),
        ("OCCOC(=O)OCC", {"carbonate"}),
        ("OCCN1C(=O)c2ccccc2C1=O", {"phthalimide"}),
        ("OCCNC(=O)C(F)(F)F", {"trifluoroacetamide"}),
        ("OCCNC(C)=O", set()),
    ],
)
def test_each_ester_and_amide_has_its_own_group(smiles: str, groups: set[str]) -> None:
    assert set(find_groups(Chem.MolFromSmiles(smiles))) == groups
