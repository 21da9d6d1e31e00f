"""Cut a glycoside into the peracetate and the alcohol it is made from.

donor (sugar peracetate) + acceptor (alcohol) -> glycoside + acetic acid
"""

from dataclasses import dataclass

from rdkit import Chem

from labplan.chemistry.errors import TargetProblem
from labplan.chemistry.groups import find_groups
from labplan.chemistry.residues import (
    Residue,
    acceptor_name,
    glycoside_name,
    peracetate_name,
)
from labplan.chemistry.structures import Structure, describe, read_molecule
from labplan.chemistry.sugars import SugarRing, find_residue_of, find_sugar_rings

_ACETATE = Chem.MolFromSmarts("[OX2;!R]-[CX3](=[OX1])-[CH3]")
_S_GLYCOSIDE = Chem.MolFromSmarts(
    "[SX2]-[CX4;R1]1-[OX2;R1]-[CX4;R1]-[CX4;R1]([OX2,N])-[CX4;R1]([OX2,N])-[CX4;R1]1"
)
_HYDROXYL = Chem.MolFromSmarts("[OX2H]")
_ACID = Chem.MolFromSmarts("[CX3](=O)[OX2H]")
_ALCOHOL = Chem.MolFromSmarts("[OX2H;!$([OX2H]C=O)]")


@dataclass(frozen=True)
class Target:
    """A glycoside as read: what it is, where it would be cut, what it would be made from.

    `glycoside` is what the coupling gives, with every hydroxyl of the sugar acetylated; it is the
    target itself unless `needs_deacetylation`. `residue` is None for a sugar that is not in the
    table: described, not named.
    """

    structure: Structure
    name: str | None
    glycoside: Structure
    glycoside_name: str | None
    needs_deacetylation: bool
    residue: Residue | None
    anomer: str | None
    relation: str
    c2_substituent: str
    sugar_acetates: int  # of the target as given
    sugar_hydroxyls: int
    other_sugar_groups: int
    glycoside_acetates: int  # of the coupling's product, sugar and aglycone
    donor: Structure
    donor_name: str | None
    acceptor: Structure
    acceptor_name: str | None
    acceptor_oh: str  # "primary", "secondary", "tertiary", "phenol", "acid"
    acceptor_hydroxyls: int
    acceptor_acids: int
    acceptor_groups: tuple[str, ...]

    @property
    def residue_name(self) -> str | None:
        return self.residue.name if self.residue else None


def read_target(smiles: str) -> Target:
    """Read and cut a target given as isomeric SMILES.

    Raises TargetProblem for what is not one defined glycoside: unreadable or too large, no
    sugar, no glycosidic bond, several places to cut, an undefined centre.
    """
    mol = read_molecule(smiles)
    rings = find_sugar_rings(mol)
    if not rings and mol.HasSubstructMatch(_S_GLYCOSIDE):
        raise TargetProblem(
            "s_glycoside",
            "The target is an S-glycoside (thioglycoside): sulfur stands at its anomeric carbon. "
            "Only O-glycosides are planned so far.",
        )
    if not rings:
        raise TargetProblem(
            "no_sugar",
            "There is no pyranose ring of a sugar in the target. Give a glycoside, as isomeric "
            "SMILES with its stereo centres.",
        )
    ring = _ring_to_cut(mol, rings)
    _require_defined(mol, ring)
    return _cut(mol, ring, rings)


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


def _cut(mol: Chem.Mol, ring: SugarRing, rings: tuple[SugarRing, ...]) -> Target:
    groups = _sugar_groups(mol, ring)
    residue = find_residue_of(mol, ring, rings)
    glycoside = _acetylated(mol, groups.hydroxyls)
    donor, acceptor, oxygen = _fragments(glycoside, ring)
    donor_structure, acceptor_structure = describe(donor), describe(acceptor)
    is_full = not groups.hydroxyls and not groups.others
    is_free = not groups.acetates and not groups.others
    return Target(
        structure=describe(mol),
        name=glycoside_name(residue, ring.anomer, acceptor_structure, acetylated=is_full)
        if is_full or is_free
        else None,
        glycoside=describe(glycoside),
        glycoside_name=glycoside_name(residue, ring.anomer, acceptor_structure, acetylated=True),
        needs_deacetylation=bool(groups.hydroxyls),
        residue=residue,
        anomer=ring.anomer,
        relation=ring.relation,
        c2_substituent=ring.c2_substituent,
        sugar_acetates=len(groups.acetates),
        sugar_hydroxyls=len(groups.hydroxyls),
        other_sugar_groups=len(groups.others),
        glycoside_acetates=len(glycoside.GetSubstructMatches(_ACETATE)),
        donor=donor_structure,
        donor_name=peracetate_name(residue, ring.anomer),
        acceptor=acceptor_structure,
        acceptor_name=acceptor_name(acceptor_structure),
        acceptor_oh=_hydroxyl_class(acceptor, oxygen),
        acceptor_hydroxyls=len(acceptor.GetSubstructMatches(_ALCOHOL)),
        acceptor_acids=len(acceptor.GetSubstructMatches(_ACID)),
        acceptor_groups=find_groups(acceptor),
    )


@dataclass(frozen=True)
class _SugarGroups:
    """Oxygens of the sugar side that could carry an acetyl, by what they carry."""

    hydroxyls: tuple[int, ...]
    acetates: tuple[int, ...]
    others: tuple[int, ...]


def _sugar_groups(mol: Chem.Mol, ring: SugarRing) -> _SugarGroups:
    """Sort the exocyclic oxygens (and nitrogens) of the sugar side; linkages are left out."""
    side = _sugar_side_atoms(mol, ring)
    acetates = {match[0] for match in mol.GetSubstructMatches(_ACETATE)} & side
    hydroxyls = {match[0] for match in mol.GetSubstructMatches(_HYDROXYL)} & side
    rings = find_sugar_rings(mol)
    skeleton = {index for found in rings for index in found.atoms}
    linking = {found.anomeric_oxygen for found in rings}
    others = {
        atom.GetIdx()
        for atom in mol.GetAtoms()
        if atom.GetIdx() in side - skeleton - linking - acetates - hydroxyls
        and atom.GetAtomicNum() in (7, 8, 16)
        and _is_on_sugar_carbon(atom, skeleton)
    }
    return _SugarGroups(tuple(sorted(hydroxyls)), tuple(sorted(acetates)), tuple(sorted(others)))


def _is_on_sugar_carbon(atom: Chem.Atom, skeleton: set[int]) -> bool:
    """Whether the atom sits on a ring carbon or on the C-6 next to one."""
    return any(
        n.GetAtomicNum() == 6
        and (n.GetIdx() in skeleton or any(c.GetIdx() in skeleton for c in n.GetNeighbors()))
        and n.GetHybridization() == Chem.HybridizationType.SP3
        for n in atom.GetNeighbors()
    )


def _acetylated(mol: Chem.Mol, hydroxyls: tuple[int, ...]) -> Chem.Mol:
    """Put an acetyl on each of these oxygens; no stereo mark is touched."""
    if not hydroxyls:
        return mol
    editable = Chem.RWMol(mol)
    for oxygen in hydroxyls:
        carbonyl = editable.AddAtom(Chem.Atom(6))
        editable.AddBond(oxygen, carbonyl, Chem.BondType.SINGLE)
        for number, bond in ((8, Chem.BondType.DOUBLE), (6, Chem.BondType.SINGLE)):
            editable.AddBond(carbonyl, editable.AddAtom(Chem.Atom(number)), bond)
    return _finished(editable)


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


def _hydroxyl_class(acceptor: Chem.Mol, oxygen: int) -> str:
    carbon = acceptor.GetAtomWithIdx(oxygen).GetNeighbors()[0]
    if carbon.GetIsAromatic():
        return "phenol"
    if any(bond.GetBondTypeAsDouble() == 2 for bond in carbon.GetBonds()):
        return "acid"
    carbons = sum(n.GetAtomicNum() == 6 for n in carbon.GetNeighbors())
    return {0: "primary", 1: "primary", 2: "secondary"}.get(carbons, "tertiary")
