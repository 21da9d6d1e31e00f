"""Groups whose fate under an acid, a base or hydrogen decides whether a stage is planned."""

from rdkit import Chem

# Names are those of the columns of fixtures/survival.json.
_GROUPS = {
    "Fmoc": "[NX3][CX3](=O)[OX2][CH2]C1c2ccccc2-c2ccccc12",
    "Cbz": "[NX3][CX3](=O)[OX2][CH2]c1ccccc1",
    "Boc": "[NX3][CX3](=O)[OX2][CX4]([CH3])([CH3])[CH3]",
    "tert-butyl ester or ether": "[OX2;!$(OC(=O)[#7])][CX4]([CH3])([CH3])[CH3]",
    "benzyl ester": "[#6][CX3](=O)[OX2][CH2]c1ccccc1",
    "benzyl ether": "[CX4;!$(C(=O))][OX2;!$(O-C=O)][CH2]c1ccc([!$(O[CH3])])cc1",
    "allyl ester": "[#6][CX3](=O)[OX2][CH2][CH]=[CH2]",
    # Of an acid or on an alcohol; methyl, tert-butyl, benzyl and allyl have their own rows.
    "acyl or alkyl ester": "[CX3;$([CX3][#6]),$([CX3H1])](=O)[OX2][#6;!$([CH3]);!$([CX3]=O);"
    "!$([CX4]([CH3])([CH3])[CH3]);!$([CH2]c1ccccc1);!$([CH2][CH]=[CH2])]",
    "methyl ester": "[#6][CX3](=O)[OX2][CH3]",
    "carbonate": "[OX2][CX3](=O)[OX2]",
    "phthalimide": "[#7]1C(=O)c2ccccc2C1=O",
    "trifluoroacetamide": "[#7][CX3](=O)C(F)(F)F",
    "alkene": "[CX3;!$(C=O)]=[CX3]",
    "alkyne": "C#C",
    "trityl": "[CX4](c1ccccc1)(c1ccccc1)c1ccccc1",
    "silyl ether": "[OX2][SiX4]",
    "acetal": "[CX4;!$([CX4]1OCCCC1)]([OX2][#6])[OX2][#6]",
    "4-methoxybenzyl ether": "[OX2;!$(O-C=O)][CH2]c1ccc(O[CH3])cc1",
    "azide": "[#6]-[NX2]=[NX2]=[NX1]",
    "bromo or iodo alkyl": "[CX4][Br,I]",
    "nitro": "[NX3](=O)=O",
    "thiol": "[SX2H]",
    "thioether": "[#6][SX2][#6]",
    "amine": "[NX3;H2,H1;!$(N-C=[O,S,N]);!$(N-S=O);!$(N-[#7])]",
    "tertiary amine": "[NX3;H0;!$(N-C=[O,S,N]);!$(N-S=O);!$(N~[#7,#8]);!$(N-c)]([#6])([#6])[#6]",
    "carboxylic acid": "[CX3](=O)[OX2H]",
    "epoxide": "C1OC1",
    "aldehyde": "[CX3H1](=O)[#6]",
}
_PATTERNS = {name: Chem.MolFromSmarts(smarts) for name, smarts in _GROUPS.items()}
GROUP_NAMES = tuple(_GROUPS)


def find_groups(mol: Chem.Mol) -> tuple[str, ...]:
    """Names of the groups present, in alphabetical order."""
    return tuple(sorted(name for name, query in _PATTERNS.items() if mol.HasSubstructMatch(query)))
