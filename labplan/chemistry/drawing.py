"""Draw structures as SVG: black lines, one bond length, the sugar ring always the same way up.

The coupled sugar lies as chemists number it, its ring oxygen at the upper right and C-1 at the
lower right, so that donor, glycoside and target stand in a scheme like stages of one molecule.
Common groups are written short (OAc, Fmoc), as in a scheme drawn by hand.
"""

import itertools
import math
import re
from collections.abc import Iterable
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

from rdkit import Chem
from rdkit.Chem import rdAbbreviations, rdDepictor
from rdkit.Chem.Draw import rdMolDraw2D
from rdkit.Geometry import Point2D

from labplan.chemistry.structures import canonical_smiles
from labplan.chemistry.sugars import SugarRing, find_sugar_rings

BOND_ANGSTROM = 1.5
PIXELS_PER_ANGSTROM = 18.0
MM_PER_PIXEL = 0.2  # a bond is 5.4 mm on paper, for every structure of a sheet
LINE_WIDTH_PIXELS = 2
FONT_SIZE_PIXELS = 15
# O-5, C-1, C-2, C-3, C-4, C-5, seen from above; degrees, counted against the clock.
_RING_ANGLES = (30, -30, -90, -150, 150, 90)
_C1_PLACE, _O1_PLACE = 1, 6
# label, the label when its bond comes from the right, SMARTS with the attachment point first
_SHORT_GROUPS = (
    ("OAc", "AcO", "OC(C)=O"),
    ("OBz", "BzO", "OC(=O)c1ccccc1"),
    ("NHFmoc", "FmocHN", "NC(=O)OCC1c2ccccc2-c2ccccc12"),
    ("NHCbz", "CbzHN", "NC(=O)OCc1ccccc1"),
    ("NHBoc", "BocHN", "NC(=O)OC(C)(C)C"),
    ("CO2Bn", "BnO2C", "C(=O)OCc1ccccc1"),
    ("CO2Me", "MeO2C", "C(=O)OC"),
)
_PLACE = "labplan_place"
_CANVAS_PIXELS = 8000  # larger than any structure, so that none is made smaller to fit
_MARGIN_PIXELS = 3
_PATH = re.compile(r"<path\b([^>]*?)/>")
_ATTRIBUTE = re.compile(r"([\w-]+)='([^']*)'")
_COMMANDS = frozenset("MLQCZ")
_STYLE = re.compile(r"(fill|stroke|stroke-width|stroke-dasharray):([^;]+)")


@dataclass(frozen=True)
class Drawing:
    """One structure as SVG text, with its size on paper [mm]."""

    svg: str
    width_mm: float
    height_mm: float


def draw(smiles: str) -> Drawing:
    """Draw a structure that has been read before; ValueError if it cannot be read.

    The same SMILES gives the same text in one pinned environment.
    """
    return _drawn(canonical_smiles(smiles))


@lru_cache(maxsize=512)
def _drawn(canonical: str) -> Drawing:
    text = _svg(lay_out(Chem.MolFromSmiles(canonical)))
    elements = [_compact_element(found) for found in _PATH.findall(text)]
    numbers = [float(word) for words, _ in elements for word in words if word not in _COMMANDS]
    across, down = numbers[::2], numbers[1::2]  # every command of these paths takes pairs
    left, top = (math.floor(min(values)) - _MARGIN_PIXELS for values in (across, down))
    width = math.ceil(max(across)) + _MARGIN_PIXELS - left
    height = math.ceil(max(down)) + _MARGIN_PIXELS - top
    body = "".join(f'<path d="{_shifted(words, left, top)}"{style}/>' for words, style in elements)
    svg = (
        f'<svg xmlns="http://www.w3.org/2000/svg" width="{width}" height="{height}" '
        f'viewBox="0 0 {width} {height}">{body}</svg>'
    )
    return Drawing(svg, round(width * MM_PER_PIXEL, 1), round(height * MM_PER_PIXEL, 1))


def _shifted(words: list[str], left: int, top: int) -> str:
    shifts, out = itertools.cycle((left, top)), []
    for word in words:
        out.append(word if word in _COMMANDS else f"{float(word) - next(shifts):.1f}")
    return " ".join(out)


def _compact_element(attributes: str) -> tuple[list[str], str]:
    """The path and, in a few words, how it is drawn: the text is stored with every plan."""
    found = dict(_ATTRIBUTE.findall(attributes))
    style = {key: word.removesuffix("px") for key, word in _STYLE.findall(found.get("style", ""))}
    if "fill" in found:
        style["fill"] = found["fill"]
    if style.get("fill") == "#000000":
        del style["fill"]  # what SVG fills with when nothing is said
    words = "".join(f' {name}="{value}"' for name, value in style.items())
    return found["d"].replace(",", " ").split(), words


def lay_out(mol: Chem.Mol) -> Chem.Mol:
    """A copy with groups written short, two-dimensional coordinates and wedges."""
    ring = _ring_to_orient(mol, find_sugar_rings(mol))
    for place, index in enumerate(_atoms_to_place(ring) if ring else ()):
        # atoms are numbered anew where groups are written short; their properties stay
        mol.GetAtomWithIdx(index).SetIntProp(_PLACE, place)
    short = rdAbbreviations.CondenseMolAbbreviations(mol, _abbreviations(), 1.0, True)
    points = {
        atom.GetIdx(): _point(atom.GetIntProp(_PLACE))
        for atom in short.GetAtoms()
        if atom.HasProp(_PLACE)
    }
    rdDepictor.Compute2DCoords(short, canonOrient=not points, coordMap=points)
    if not points:
        _turn_hydroxyl_left(short)
    return rdMolDraw2D.PrepareMolForDrawing(short, kekulize=True, addChiralHs=False)


@lru_cache(maxsize=1)
def _abbreviations() -> Iterable[rdAbbreviations.AbbreviationDefinition]:
    lines = "\n".join(f"{label} {smarts} {label} {left}" for label, left, smarts in _SHORT_GROUPS)
    parsed: Iterable[rdAbbreviations.AbbreviationDefinition]
    parsed = rdAbbreviations.ParseAbbreviations(lines)
    return parsed


def _atoms_to_place(ring: SugarRing) -> tuple[int, ...]:
    """The ring, its O-1 and what O-1 carries, so that the chain leaves to the right."""
    aglycone = (ring.aglycone_atom,) if ring.aglycone_atom is not None else ()
    return (*ring.atoms, ring.anomeric_oxygen, *aglycone)


def _point(place: int) -> Point2D:
    if place == _O1_PLACE:
        c1 = _point(_C1_PLACE)
        return Point2D(2 * c1.x, 2 * c1.y)
    if place > _O1_PLACE:
        o1, step = _point(_O1_PLACE), _point(0)
        return Point2D(o1.x + step.x, o1.y + step.y)
    angle = math.radians(_RING_ANGLES[place])
    return Point2D(BOND_ANGSTROM * math.cos(angle), BOND_ANGSTROM * math.sin(angle))


def _ring_to_orient(mol: Chem.Mol, rings: tuple[SugarRing, ...]) -> SugarRing | None:
    """The reducing end: the ring whose anomeric oxygen carries no other sugar."""
    sugar_atoms = {index for ring in rings for index in ring.atoms}
    for ring in rings:
        beyond = {ring.aglycone_atom} if ring.aglycone_atom is not None else set()
        for index in list(beyond):
            beyond |= {n.GetIdx() for n in mol.GetAtomWithIdx(index).GetNeighbors()}
        if not (beyond - set(ring.atoms)) & sugar_atoms:
            return ring
    return None


def _turn_hydroxyl_left(mol: Chem.Mol) -> None:
    """An alcohol comes to the sugar with its hydroxyl first."""
    places = mol.GetConformer()
    hydroxyls = [
        places.GetAtomPosition(atom.GetIdx()).x
        for atom in mol.GetAtoms()
        if atom.GetAtomicNum() == 8 and atom.GetTotalNumHs() == 1
    ]
    middle = sum(p[0] for p in places.GetPositions()) / max(mol.GetNumAtoms(), 1)
    if not hydroxyls or min(hydroxyls) <= middle:
        return
    for index in range(mol.GetNumAtoms()):
        place = places.GetAtomPosition(index)
        places.SetAtomPosition(index, (-place.x, -place.y, 0.0))


def _svg(mol: Chem.Mol) -> str:
    drawer = rdMolDraw2D.MolDraw2DSVG(_CANVAS_PIXELS, _CANVAS_PIXELS)
    options: Any = drawer.drawOptions()  # its stubs call every option an options object
    options.useBWAtomPalette()
    options.clearBackground = False
    options.fixedBondLength = PIXELS_PER_ANGSTROM
    options.bondLineWidth = LINE_WIDTH_PIXELS
    options.scaleBondWidth = False
    options.fixedFontSize = FONT_SIZE_PIXELS
    options.additionalAtomLabelPadding = 0.05
    options.prepareMolsBeforeDrawing = False
    drawer.DrawMolecule(mol)
    drawer.FinishDrawing()
    text: str = drawer.GetDrawingText()
    return text
