"""Say how another acylated sugar differs from the donor that is wanted."""

from functools import lru_cache

from rdkit import Chem

from labplan.chemistry.sugars import SugarRing, find_sugar_rings, read_glycan


@lru_cache(maxsize=512)
def difference_from_donor(wanted_smiles: str, other_smiles: str) -> str | None:
    """Why `other` cannot stand in for the donor `wanted`; None when they are the same.

    Formula and the first block of an InChIKey are blind to this: cellobiose and lactose share both.
    """
    wanted, other = _reducing_end(wanted_smiles), _reducing_end(other_smiles)
    if wanted is None or other is None:
        return "is another compound"
    if wanted[1] != other[1]:
        return "is another sugar (same formula and first InChIKey block)"
    if wanted[0].anomer != other[0].anomer:
        return f"is the {other[0].anomer} anomer, {other[0].relation}, a sluggish donor"
    return None


def _reducing_end(smiles: str) -> tuple[SugarRing, str | None] | None:
    """The ring whose anomeric oxygen carries no other sugar, and the glycan it ends."""
    mol = Chem.MolFromSmiles(smiles)
    rings = find_sugar_rings(mol)
    atoms = {index for ring in rings for index in ring.atoms}
    ends = [
        ring for ring in rings if ring.aglycone_atom not in atoms and not _links(mol, ring, atoms)
    ]
    if len(ends) != 1:
        return None
    return ends[0], read_glycan(mol, ends[0], rings)


def _links(mol: Chem.Mol, ring: SugarRing, atoms: set[int]) -> bool:
    """Whether the anomeric oxygen sits on the C-6 of another sugar."""
    if ring.aglycone_atom is None:
        return False
    aglycone = mol.GetAtomWithIdx(ring.aglycone_atom)
    return any(n.GetIdx() in atoms for n in aglycone.GetNeighbors())
