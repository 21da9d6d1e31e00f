"""Read a structure and say what it is."""

from dataclasses import dataclass
from functools import lru_cache

from rdkit import Chem, RDLogger, rdBase
from rdkit.Chem import inchi, rdMolDescriptors

from labplan.chemistry.errors import TargetProblem

# RDKit prints each refusal to stderr as well; the reason goes to the caller instead.
RDLogger.DisableLog("rdApp.*")  # type: ignore[attr-defined]

MAX_CHARACTERS = 2000
MAX_HEAVY_ATOMS = 200


@dataclass(frozen=True)
class Structure:
    """A molecule as printed and counted; masses in g/mol and Da."""

    smiles: str
    inchikey: str
    formula: str
    molar_mass_g_per_mol: float
    monoisotopic_mass_da: float


def rdkit_version() -> str:
    return str(rdBase.rdkitVersion)


def read_molecule(smiles: str) -> Chem.Mol:
    """Parse one isomeric SMILES of one neutral, not too large molecule.

    Atom-map numbers ([CH3:5]) are cleared: they number atoms and are no part of the structure.
    Raises TargetProblem: empty, too_long, unreadable, several_components, too_large, charged,
    isotopes.
    """
    text = smiles.strip()
    if not text:
        raise TargetProblem("smiles_empty", "Give the target as an isomeric SMILES.")
    if len(text) > MAX_CHARACTERS:
        raise TargetProblem(
            "smiles_too_long", f"The SMILES has {len(text)} characters; at most {MAX_CHARACTERS}."
        )
    mol = _parse(text)
    if "." in text and len(Chem.GetMolFrags(mol)) > 1:
        raise TargetProblem(
            "several_components",
            "The SMILES holds several components; give the glycoside alone, without salt or "
            "solvent.",
        )
    if mol.GetNumHeavyAtoms() > MAX_HEAVY_ATOMS:
        raise TargetProblem(
            "too_many_atoms",
            f"The target has {mol.GetNumHeavyAtoms()} heavy atoms; at most {MAX_HEAVY_ATOMS}.",
        )
    _require_plain_atoms(mol)
    for atom in mol.GetAtoms():
        atom.SetAtomMapNum(0)
    return mol


def _parse(text: str) -> Chem.Mol:
    if not text.isascii() or not text.isprintable():
        raise TargetProblem(
            "smiles_unreadable", "The SMILES has a character that no SMILES has; type it again."
        )
    if any(character.isspace() for character in text):
        raise TargetProblem(
            "smiles_unreadable", "The SMILES has a space in it; give the structure alone."
        )
    with rdBase.BlockLogs():
        mol = Chem.MolFromSmiles(text)
    if mol is None:
        raise TargetProblem(
            "smiles_unreadable",
            "The SMILES cannot be read: check brackets, ring numbers and valences.",
        )
    if mol.GetNumAtoms() == 0:
        raise TargetProblem("smiles_empty", "Give the target as an isomeric SMILES.")
    return mol


def _require_plain_atoms(mol: Chem.Mol) -> None:
    for atom in mol.GetAtoms():
        if atom.GetAtomicNum() == 0:
            raise TargetProblem("wildcard_atom", "Replace the wildcard atom (*) by a real one.")
        if atom.GetIsotope():
            raise TargetProblem("isotope", "Leave isotope labels out; they are not planned yet.")
        if atom.GetNumRadicalElectrons():
            raise TargetProblem("radical", f"{atom.GetSymbol()} has an open valence; close it.")
    if Chem.GetFormalCharge(mol):
        raise TargetProblem("charged", "The target carries a charge; give the neutral compound.")


def describe(mol: Chem.Mol) -> Structure:
    """Canonical SMILES, InChIKey, formula (Hill), average [g/mol] and monoisotopic mass [Da]."""
    return _describe(Chem.MolToSmiles(mol))


def describe_smiles(smiles: str) -> Structure:
    """Describe a structure of the packaged tables or of the stock; ValueError if unreadable."""
    return _describe(canonical_smiles(smiles))


def canonical_smiles(smiles: str) -> str:
    """RDKit's canonical isomeric SMILES; ValueError if unreadable."""
    with rdBase.BlockLogs():
        mol = Chem.MolFromSmiles(smiles)
    if mol is None:
        raise ValueError(f"unreadable SMILES: {smiles}")
    return str(Chem.MolToSmiles(mol))


@lru_cache(maxsize=2048)
def _describe(canonical: str) -> Structure:
    mol = Chem.MolFromSmiles(canonical)
    with rdBase.BlockLogs():
        key = inchi.MolToInchiKey(mol)  # type: ignore[no-untyped-call]
    return Structure(
        smiles=canonical,
        inchikey=key,
        formula=rdMolDescriptors.CalcMolFormula(mol),
        molar_mass_g_per_mol=round(float(rdMolDescriptors._CalcMolWt(mol)), 4),
        monoisotopic_mass_da=round(float(rdMolDescriptors.CalcExactMolWt(mol)), 6),
    )
