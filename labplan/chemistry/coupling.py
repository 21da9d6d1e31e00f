"""Cut a glycoside into the peracetate and the alcohol it is made from.

donor (sugar peracetate) + acceptor (alcohol) -> glycoside + acetic acid
"""

from dataclasses import dataclass

from rdkit import Chem

from labplan import datafiles
from labplan.chemistry.errors import TargetProblem
from labplan.chemistry.structures import Structure, describe, read_molecule
from labplan.chemistry.sugars import SugarRing, find_sugar_rings

_ACETATE = Chem.MolFromSmarts("[OX2;!R]-[CX3](=[OX1])-[CH3]")
_HYDROXYL = Chem.MolFromSmarts("[OX2H]")


@dataclass(frozen=True)
class Target:
    """A glycoside as read: what it is, where it would be cut, what it would be made from.

    `residue_key` is None for a sugar that is not in the table: described, not named.
    """

    structure: Structure
    name: str | None
    residue_key: str | None
    residue_name: str | None
    anomer: str | None
    relation: str
    c2_substituent: str
    sugar_acyls: int
    sugar_hydroxyls: int
    other_sugar_groups: int
    sugar_rings: int
    donor: Structure
    donor_name: str | None
    acceptor: Structure
    acceptor_name: str | None
    acceptor_oh: str  # "primary", "secondary", "tertiary", "phenol", "acid"
    acceptor_hydroxyls: int
    acceptor_groups: tuple[str, ...]


def read_target(smiles: str) -> Target:
    """Read and cut a target given as isomeric SMILES.

    Raises TargetProblem for what is not one defined glycoside: unreadable or too large, no
    sugar, no glycosidic bond, several places to cut, an undefined centre.
    """
    mol = read_molecule(smiles)
    rings = find_sugar_rings(mol)
    if not rings:
        raise TargetProblem(
            "no_sugar",
            "There is no pyranose ring of a sugar in the target. Give a glycoside, as isomeric "
            "SMILES with its stereo centres.",
        )
    ring = _ring_to_cut(mol, rings)
    _require_defined(mol, ring)
    return _cut(mol, ring, len(rings))


def _ring_to_cut(mol: Chem.Mol, rings: tuple[SugarRing, ...]) -> SugarRing:
    """The one ring whose anomeric oxygen carries an aglycone that is no sugar."""
    sugar_atoms = {index for ring in rings for index in ring.atoms}
    cuttable = [ring for ring in rings if _carries_aglycone(mol, ring, sugar_atoms)]
    if len(cuttable) == 1:
        return cuttable[0]
    if cuttable:
        raise TargetProblem(
            "several_aglycones",
            f"{len(cuttable)} sugars carry an aglycone of their own; give one glycoside.",
        )
    raise TargetProblem(
        "no_glycosidic_bond",
        "The sugar carries no alcohol at its anomeric carbon (a free sugar or an acetate); give "
        "the glycoside that is to be made.",
    )


def _carries_aglycone(mol: Chem.Mol, ring: SugarRing, sugar_atoms: set[int]) -> bool:
    if ring.aglycone_atom is None or ring.aglycone_atom in sugar_atoms:
        return False
    if mol.GetBondBetweenAtoms(ring.anomeric_oxygen, ring.aglycone_atom).IsInRing():
        return False
    aglycone = mol.GetAtomWithIdx(ring.aglycone_atom)
    is_acyl = any(
        bond.GetBondTypeAsDouble() == 2 and bond.GetOtherAtom(aglycone).GetAtomicNum() == 8
        for bond in aglycone.GetBonds()
    )
    belongs_to_sugar = any(n.GetIdx() in sugar_atoms for n in aglycone.GetNeighbors())
    return aglycone.GetAtomicNum() == 6 and not is_acyl and not belongs_to_sugar


def _require_defined(mol: Chem.Mol, ring: SugarRing) -> None:
    if ring.anomeric_carbon in ring.open_centres:
        raise TargetProblem(
            "undefined_anomeric_centre",
            "The anomeric centre has no stereo mark (@ or @@), so alpha and beta are both meant; "
            "give one of them.",
        )
    if ring.open_centres:
        raise TargetProblem(
            "undefined_sugar_centre",
            f"{len(ring.open_centres)} stereo centre(s) of the sugar ring have no mark (@ or @@); "
            "give all of them.",
        )
    open_elsewhere = [
        index for index, mark in _marked_centres(mol) if mark == "?" and index not in ring.atoms
    ]
    if open_elsewhere:
        raise TargetProblem(
            "undefined_centre",
            f"{len(open_elsewhere)} stereo centre(s) outside the sugar ring have no mark "
            "(@ or @@); give all of them.",
        )


def _marked_centres(mol: Chem.Mol) -> list[tuple[int, str]]:
    found: list[tuple[int, str]] = Chem.FindMolChiralCenters(  # type: ignore[no-untyped-call]
        mol, includeUnassigned=True
    )
    return found


def _cut(mol: Chem.Mol, ring: SugarRing, sugar_rings: int) -> Target:
    donor, acceptor, oxygen = _fragments(mol, ring)
    donor_structure, acceptor_structure = describe(donor), describe(acceptor)
    residue = _residue_row(ring.residue_key)
    sugar_side = _sugar_side_atoms(mol, ring)
    acyls = sum(match[0] in sugar_side for match in mol.GetSubstructMatches(_ACETATE))
    hydroxyls = sum(match[0] in sugar_side for match in mol.GetSubstructMatches(_HYDROXYL))
    positions = _protectable_positions(mol, ring)
    fully_acetylated = hydroxyls == 0 and acyls == positions and sugar_rings == 1
    aglycone_name = _aglycone_name(acceptor_structure)
    return Target(
        structure=describe(mol),
        name=_glycoside_name(residue, ring.anomer, aglycone_name) if fully_acetylated else None,
        residue_key=ring.residue_key,
        residue_name=residue["name"] if residue else None,
        anomer=ring.anomer,
        relation=ring.relation,
        c2_substituent=ring.c2_substituent,
        sugar_acyls=acyls,
        sugar_hydroxyls=hydroxyls,
        other_sugar_groups=positions - acyls - hydroxyls,
        sugar_rings=sugar_rings,
        donor=donor_structure,
        donor_name=_donor_name(residue, ring.anomer) if fully_acetylated else None,
        acceptor=acceptor_structure,
        acceptor_name=_acceptor_name(acceptor_structure),
        acceptor_oh=_hydroxyl_class(acceptor, oxygen),
        acceptor_hydroxyls=len(acceptor.GetSubstructMatches(_HYDROXYL)),
        acceptor_groups=find_groups(acceptor),
    )


def _fragments(mol: Chem.Mol, ring: SugarRing) -> tuple[Chem.Mol, Chem.Mol, int]:
    """Cut between the anomeric oxygen and the aglycone; C-1 keeps its oxygen and its face.

    Dummies take the place of the lost neighbour on both sides, so no stereo mark moves: on the
    sugar the dummy becomes the acetyl carbon, on the aglycone the hydroxyl oxygen.
    """
    assert ring.aglycone_atom is not None
    bond = mol.GetBondBetweenAtoms(ring.anomeric_oxygen, ring.aglycone_atom)
    cut = Chem.FragmentOnBonds(mol, [bond.GetIdx()], addDummies=True)
    members: list[list[int]] = []
    parts = Chem.GetMolFrags(cut, asMols=True, sanitizeFrags=False, fragsMolAtomMapping=members)
    sugar_side = 0 if ring.anomeric_oxygen in members[0] else 1
    donor = _with_acetyl(Chem.RWMol(parts[sugar_side]))
    acceptor, oxygen = _with_hydroxyl(Chem.RWMol(parts[1 - sugar_side]))
    return donor, acceptor, oxygen


def _dummy(mol: Chem.RWMol) -> Chem.Atom:
    atom = next(atom for atom in mol.GetAtoms() if atom.GetAtomicNum() == 0)
    atom.SetIsotope(0)
    return atom


def _with_acetyl(mol: Chem.RWMol) -> Chem.Mol:
    carbon = _dummy(mol)
    carbon.SetAtomicNum(6)
    for number, bond in ((8, Chem.BondType.DOUBLE), (6, Chem.BondType.SINGLE)):
        mol.AddBond(carbon.GetIdx(), mol.AddAtom(Chem.Atom(number)), bond)
    return _finished(mol)


def _with_hydroxyl(mol: Chem.RWMol) -> tuple[Chem.Mol, int]:
    oxygen = _dummy(mol)
    oxygen.SetAtomicNum(8)
    return _finished(mol), oxygen.GetIdx()


def _finished(mol: Chem.RWMol) -> Chem.Mol:
    done = mol.GetMol()
    for atom in done.GetAtoms():
        atom.SetNoImplicit(False)
    Chem.SanitizeMol(done)
    Chem.AssignStereochemistry(done, cleanIt=True, force=True)
    return done


def _sugar_side_atoms(mol: Chem.Mol, ring: SugarRing) -> set[int]:
    """Atoms reached from the ring without crossing to the aglycone."""
    seen, waiting = set(ring.atoms), list(ring.atoms)
    while waiting:
        for neighbour in mol.GetAtomWithIdx(waiting.pop()).GetNeighbors():
            index = neighbour.GetIdx()
            if index not in seen and index != ring.aglycone_atom:
                seen.add(index)
                waiting.append(index)
    return seen


def _protectable_positions(mol: Chem.Mol, ring: SugarRing) -> int:
    """Oxygens at C-2, C-3, C-4 (and C-6) that carry a hydrogen or a group."""
    carbons = list(ring.atoms[2:5])
    carbons += [
        n.GetIdx()
        for n in mol.GetAtomWithIdx(ring.atoms[5]).GetNeighbors()
        if n.GetIdx() not in ring.atoms and n.GetAtomicNum() == 6
    ]
    return sum(
        n.GetAtomicNum() == 8 and n.GetIdx() not in ring.atoms
        for index in carbons
        for n in mol.GetAtomWithIdx(index).GetNeighbors()
    )


def _hydroxyl_class(acceptor: Chem.Mol, oxygen: int) -> str:
    carbon = acceptor.GetAtomWithIdx(oxygen).GetNeighbors()[0]
    if carbon.GetIsAromatic():
        return "phenol"
    if any(bond.GetBondTypeAsDouble() == 2 for bond in carbon.GetBonds()):
        return "acid"
    carbons = sum(n.GetAtomicNum() == 6 for n in carbon.GetNeighbors())
    return {0: "primary", 1: "primary", 2: "secondary"}.get(carbons, "tertiary")


# Groups whose fate under an acid or a base decides whether a coupling is planned.
_GROUPS = {
    "alkene": "[CX3;!$(C=O)]=[CX3]",
    "alkyne": "C#C",
    "azide": "[NX1]~[NX2]~[NX2,NX1;!$([N]=[N]=[N]=[N])]-[#6]",
    "bromo or iodo alkyl": "[CX4][Br,I]",
    "thiol": "[SX2H]",
    "thioether": "[#6][SX2][#6]",
    "amine": "[NX3;H2,H1;!$(N-C=[O,S,N]);!$(N-S=O);!$(N-[#7])]",
    "tertiary amine": "[NX3;H0;!$(N-C=[O,S,N]);!$(N-S=O);!$(N~[#7,#8]);!$(N-c)]([#6])([#6])[#6]",
    "carboxylic acid": "[CX3](=O)[OX2H]",
    "tert-butyl": "[OX2,NX3;!$([N]-C(=O)O)]-[CX4]([CH3])([CH3])[CH3]",
    "trityl": "[CX4](c1ccccc1)(c1ccccc1)c1ccccc1",
    "silyl ether": "[OX2][SiX4]",
    "acetal": "[CX4;!$(C1OCCCC1)]([OX2][#6])[OX2][#6]",
    "epoxide": "C1OC1",
    "aldehyde": "[CX3H1](=O)[#6]",
    "4-methoxybenzyl ether": "[OX2;!$(O-C=O)][CH2]c1ccc(O[CH3])cc1",
    "benzyl ether": "[CX4][OX2;!$(O-C=O)][CH2]c1ccccc1",
    "Fmoc": "[NX3][CX3](=O)[OX2][CH2]C1c2ccccc2-c2ccccc12",
    "Cbz": "[NX3][CX3](=O)[OX2][CH2]c1ccccc1",
    "tertiary alcohol": "[OX2H][CX4]([#6])([#6])[#6]",
}
_GROUP_PATTERNS = {name: Chem.MolFromSmarts(smarts) for name, smarts in _GROUPS.items()}


def find_groups(mol: Chem.Mol) -> tuple[str, ...]:
    """Names of the groups present, in alphabetical order."""
    return tuple(
        sorted(name for name, query in _GROUP_PATTERNS.items() if mol.HasSubstructMatch(query))
    )


def _residue_row(key: str | None) -> dict[str, str] | None:
    rows = datafiles.table("sugars")["residues"]
    return next((row for row in rows if row["key"] == key), None)


def _aglycone_name(acceptor: Structure) -> str | None:
    return _name_by_inchikey("aglycones", acceptor)


def _acceptor_name(acceptor: Structure) -> str | None:
    return _name_by_inchikey("acceptors", acceptor)


def _name_by_inchikey(column: str, structure: Structure) -> str | None:
    names: dict[str, str] = datafiles.table("sugars")[column]
    return names.get(structure.inchikey)


def _glycoside_name(
    residue: dict[str, str] | None, anomer: str | None, aglycone: str | None
) -> str | None:
    """2-Carb-33: aglycone, locants of the acyl groups, anomer, series, stem."""
    if not (residue and anomer and aglycone):
        return None
    return (
        f"{aglycone} {residue['acetyl_prefix']}-{anomer}-{residue['series']}-{residue['stem']}ide"
    )


def _donor_name(residue: dict[str, str] | None, anomer: str | None) -> str | None:
    if not (residue and anomer):
        return None
    return f"{residue['peracetate_prefix']}-{anomer}-{residue['series']}-{residue['stem']}e"
