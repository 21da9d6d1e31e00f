"""Find sugar rings and say what they are: configuration, series, anomer, 1,2-relation.

Faces, not R and S: Br, S and OAc at C-1 swap CIP priorities, the face of the ring does not.
A face is +1 or -1; with the ring numbered O-5, C-1, C-2 ... clockwise as seen from above, +1
is up. IUPAC 2-Carb-6.3 (Pure Appl. Chem. 1996, 68, 1919): alpha when the oxygen at C-1 and the
one at the configurational reference centre are on the same side in the Fischer projection.
"""

from dataclasses import dataclass

from rdkit import Chem

from labplan.chemistry.residues import Residue, find_monosaccharide, find_oligosaccharide

_CHIRAL = {
    Chem.ChiralType.CHI_TETRAHEDRAL_CW: -1,
    Chem.ChiralType.CHI_TETRAHEDRAL_CCW: 1,
}
# Faces of the substituents at C-2, C-3, C-4 in a D-hexopyranose whose C-6 is up: right in the
# Fischer projection is down in the ring (2-Carb-5.3).
_HEXO = {
    (-1, -1, -1): "allo",
    (+1, -1, -1): "altro",
    (-1, +1, -1): "gluco",
    (+1, +1, -1): "manno",
    (-1, -1, +1): "gulo",
    (+1, -1, +1): "ido",
    (-1, +1, +1): "galacto",
    (+1, +1, +1): "talo",
}
# C-2 and C-3 in a D-pentopyranose whose O-4 is down.
_PENTO = {(-1, -1): "ribo", (+1, -1): "arabino", (-1, +1): "xylo", (+1, +1): "lyxo"}


@dataclass(frozen=True)
class SugarRing:
    """One pyranose ring. Atom numbers refer to the molecule it was found in.

    `configuration`, `series` and `anomer` are None where the ring leaves a centre open or is
    not an aldohexose or aldopentose pyranose: it is then described, never guessed.
    """

    atoms: tuple[int, ...]  # O-5, C-1, C-2, C-3, C-4, C-5
    anomeric_oxygen: int
    aglycone_atom: int | None  # what O-1 carries beside C-1; None for OH
    c2_substituent: str  # "O", "N", "H" or another symbol
    c6: str  # "CH2O", "CH3", "COO", "H", "other"
    configuration: str | None
    series: str | None  # "D" or "L"
    anomer: str | None  # "alpha" or "beta"
    relation: str  # "1,2-trans", "1,2-cis" or "none"
    open_centres: tuple[int, ...]

    @property
    def anomeric_carbon(self) -> int:
        return self.atoms[1]

    @property
    def residue(self) -> Residue | None:
        """The monosaccharide of this ring by itself, or None when the table has no name for it."""
        if self.configuration is None or self.series is None or self.c2_substituent != "O":
            return None
        return find_monosaccharide(self.series, self.configuration, self.c6)


def find_sugar_rings(mol: Chem.Mol) -> tuple[SugarRing, ...]:
    """Return every pyranose ring with an oxygen at C-1 and two or more at C-2 to C-4."""
    with_hydrogens = Chem.AddHs(mol)
    found = []
    for ring in mol.GetRingInfo().AtomRings():
        ordered = _ordered_pyranose(mol, ring)
        if ordered is not None:
            found.append(_describe_ring(with_hydrogens, ordered))
    return tuple(sorted(found, key=lambda sugar: sugar.atoms))


def _ordered_pyranose(mol: Chem.Mol, ring: tuple[int, ...]) -> tuple[int, ...] | None:
    """Number a six-membered ring from its oxygen through the anomeric carbon."""
    atoms = [mol.GetAtomWithIdx(index) for index in ring]
    oxygens = [atom for atom in atoms if atom.GetAtomicNum() == 8]
    if len(ring) != 6 or len(oxygens) != 1:
        return None
    if any(a.GetHybridization() != Chem.HybridizationType.SP3 for a in atoms if a not in oxygens):
        return None
    start = ring.index(oxygens[0].GetIdx())
    forward = ring[start:] + ring[:start]
    backward = (forward[0], *reversed(forward[1:]))
    anomeric = [way for way in (forward, backward) if _outside(mol, way[1], ring, 8)]
    if len(anomeric) != 1:
        return None
    way = anomeric[0]
    hydroxylated = sum(bool(_outside(mol, index, ring, 8, 7)) for index in way[2:5])
    return way if hydroxylated >= 2 else None


def _outside(mol: Chem.Mol, index: int, ring: tuple[int, ...], *numbers: int) -> list[int]:
    """Neighbours of a ring atom outside the ring, of these atomic numbers."""
    return [
        other.GetIdx()
        for other in mol.GetAtomWithIdx(index).GetNeighbors()
        if other.GetIdx() not in ring and other.GetAtomicNum() in numbers
    ]


def _describe_ring(mol: Chem.Mol, ring: tuple[int, ...]) -> SugarRing:
    faces = {i: _face(mol, ring, i) for i in range(1, 6)}
    c2 = _substituent(mol, ring, 2)
    c6 = _c6_kind(mol, ring)
    needed = range(1, 5) if c6 == "H" else range(1, 6)
    open_centres = tuple(
        ring[i] for i in needed if faces[i] == 0 and _substituent(mol, ring, i) != "H"
    )
    configuration, series = _configuration(mol, ring, faces, c6)
    o1 = _outside(mol, ring[1], ring, 8)[0]
    aglycone = [
        n.GetIdx()
        for n in mol.GetAtomWithIdx(o1).GetNeighbors()
        if n.GetIdx() != ring[1] and n.GetAtomicNum() > 1
    ]
    anomer = None
    if series is not None and faces[1]:
        down_is_alpha = 1 if series == "D" else -1
        anomer = "alpha" if faces[1] == -down_is_alpha else "beta"
    relation = "none"
    if c2 in ("O", "N") and faces[1] and faces[2]:
        relation = "1,2-trans" if faces[1] != faces[2] else "1,2-cis"
    return SugarRing(
        atoms=ring,
        anomeric_oxygen=o1,
        aglycone_atom=aglycone[0] if aglycone else None,
        c2_substituent=c2,
        c6=c6,
        configuration=configuration,
        series=series,
        anomer=anomer,
        relation=relation,
        open_centres=open_centres,
    )


def _configuration(
    mol: Chem.Mol, ring: tuple[int, ...], faces: dict[int, int], c6: str
) -> tuple[str | None, str | None]:
    """Name the configuration: turn an L ring over and read it as D."""
    reference = 4 if c6 == "H" else 5
    centres = (2, 3) if c6 == "H" else (2, 3, 4)
    carries = [_substituent(mol, ring, i) for i in (2, 3, 4)]
    if "H" in carries or any(faces[i] == 0 for i in (*centres, reference)):
        return None, None
    if c6 == "other":
        return None, None
    # C-6 of a D-hexose is up, O-4 of a D-pentose is down.
    is_d = faces[reference] == (-1 if c6 == "H" else 1)
    turn = 1 if is_d else -1
    key = tuple(faces[i] * turn for i in centres)
    name = _PENTO[key] if c6 == "H" else _HEXO[key]  # type: ignore[index]
    return name, "D" if is_d else "L"


def _face(mol: Chem.Mol, ring: tuple[int, ...], position: int) -> int:
    """+1 up, -1 down, 0 undefined, for the heavier substituent at a ring position.

    Looking from the ring neighbour before it, (next, substituent, hydrogen) turn clockwise when
    the substituent is down.
    """
    atom = mol.GetAtomWithIdx(ring[position])
    sign = _CHIRAL.get(atom.GetChiralTag(), 0)
    if not sign:
        return 0
    before, after = ring[position - 1], ring[(position + 1) % 6]
    outside = sorted(
        (n for n in atom.GetNeighbors() if n.GetIdx() not in (before, after)),
        key=lambda n: -n.GetAtomicNum(),
    )
    wanted = [before, after, *(n.GetIdx() for n in outside)]
    given = [n.GetOtherAtomIdx(atom.GetIdx()) for n in atom.GetBonds()]
    return sign * _parity([given.index(index) for index in wanted])


def _parity(order: list[int]) -> int:
    swaps = sum(order[i] > order[j] for i in range(len(order)) for j in range(i + 1, len(order)))
    return -1 if swaps % 2 else 1


def _substituent(mol: Chem.Mol, ring: tuple[int, ...], position: int) -> str:
    """The symbol of the atom outside the ring, "H" for a CH2."""
    outside = [
        n for n in mol.GetAtomWithIdx(ring[position]).GetNeighbors() if n.GetIdx() not in ring
    ]
    heaviest = max(outside, key=lambda n: n.GetAtomicNum())
    return str(heaviest.GetSymbol())


def _c6_kind(mol: Chem.Mol, ring: tuple[int, ...]) -> str:
    carbons = _outside(mol, ring[5], ring, 6)
    if not carbons:
        return "H" if _substituent(mol, ring, 5) == "H" else "other"
    c6 = mol.GetAtomWithIdx(carbons[0])
    around = sorted(n.GetSymbol() for n in c6.GetNeighbors() if n.GetIdx() != ring[5])
    return {("H", "H", "O"): "CH2O", ("H", "H", "H"): "CH3", ("O", "O"): "COO"}.get(
        tuple(around), "other"
    )


def find_residue_of(mol: Chem.Mol, root: SugarRing, rings: tuple[SugarRing, ...]) -> Residue | None:
    """The residue whose reducing end is `root`, its inner sugars included."""
    text = read_glycan(mol, root, rings)
    if text is None or "(" not in text:
        return root.residue if text is not None else None
    return find_oligosaccharide(text)


def read_glycan(mol: Chem.Mol, root: SugarRing, rings: tuple[SugarRing, ...]) -> str | None:
    """`beta-D-Gal-(1-4)-D-Glc` for lactose; None when a ring has no name.

    The reducing end stands last and carries no anomer; branches stand in square brackets.
    """
    if root.residue is None:
        return None
    branches = []
    for position, oxygen in _oxygens_by_position(mol, root).items():
        inner = next((r for r in rings if r != root and r.anomeric_oxygen == oxygen), None)
        if inner is None:
            continue
        text = read_glycan(mol, inner, rings)
        if text is None or inner.anomer is None:
            return None
        branches.append(f"{inner.anomer}-{text}-(1-{position})-")
    *side, main = branches or [""]
    return "".join(f"[{branch}]" for branch in side) + f"{main}{root.series}-{root.residue.short}"


def _oxygens_by_position(mol: Chem.Mol, ring: SugarRing) -> dict[int, int]:
    """The oxygen atom at C-2, C-3, C-4 and C-6, by the number of its carbon."""
    carbons = dict(zip((2, 3, 4), ring.atoms[2:5], strict=True))
    outside_c5 = _outside(mol, ring.atoms[5], ring.atoms, 6)
    if outside_c5:
        carbons[6] = outside_c5[0]
    found = {}
    for position, carbon in carbons.items():
        oxygens = _outside(mol, carbon, ring.atoms, 8)
        if oxygens:
            found[position] = oxygens[0]
    return found
