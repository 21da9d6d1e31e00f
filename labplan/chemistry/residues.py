"""The table of residues: names, hydroxyls, which anomer is 1,2-trans (fixtures/sugars.json)."""

from dataclasses import dataclass
from functools import cache

from labplan import datafiles
from labplan.chemistry.structures import Structure


@dataclass(frozen=True)
class Residue:
    """A sugar that has a name. `glycan` is set for an oligosaccharide, as read_glycan writes it."""

    key: str
    name: str
    short: str
    series: str
    configuration: str | None
    c6: str | None
    glycan: str | None
    hydroxyls: int  # of the free sugar, the anomeric one included
    trans_anomer: str
    peracetate_name: str
    glycoside_name: str
    free_glycoside_name: str
    glycosyl_name: str
    free_glycosyl_name: str
    coupling_hz: tuple[float, float] | None


@cache
def residues() -> tuple[Residue, ...]:
    return tuple(_read(row) for row in datafiles.table("sugars")["residues"])


def find_monosaccharide(series: str, configuration: str, c6: str) -> Residue | None:
    wanted = (series, configuration, c6)
    return next((r for r in residues() if (r.series, r.configuration, r.c6) == wanted), None)


def find_oligosaccharide(glycan: str) -> Residue | None:
    return next((r for r in residues() if r.glycan == glycan), None)


def find_residue(key: str) -> Residue | None:
    return next((r for r in residues() if r.key == key), None)


def acceptor_name(acceptor: Structure) -> str | None:
    return _names("acceptors").get(acceptor.inchikey)


def glycoside_name(
    residue: Residue | None, anomer: str | None, acceptor: Structure, *, acetylated: bool
) -> str | None:
    """The glycoside's name where residue and aglycone stand in the table, else None.

    `octyl 2,3,4,6-tetra-O-acetyl-beta-D-glucopyranoside` (2-Carb-33), or with the sugar as a
    substituent of a protected amino acid (2-Carb-36).
    """
    if residue is None or anomer is None:
        return None
    aglycone = _names("aglycones").get(acceptor.inchikey)
    if aglycone is not None:
        template = residue.glycoside_name if acetylated else residue.free_glycoside_name
        return template.format(aglycone=aglycone, anomer=anomer)
    amino_acid = _names("glycosyl_amino_acids").get(acceptor.inchikey)
    if amino_acid is not None:
        template = residue.glycosyl_name if acetylated else residue.free_glycosyl_name
        return amino_acid.format(glycosyl=template.format(anomer=anomer))
    return None


def peracetate_name(residue: Residue | None, anomer: str | None) -> str | None:
    if residue is None or anomer is None:
        return None
    return residue.peracetate_name.format(anomer=anomer)


def _names(column: str) -> dict[str, str]:
    names: dict[str, str] = datafiles.table("sugars")[column]
    return names


def _read(row: dict[str, object]) -> Residue:
    values = {name: row[name] for name in Residue.__dataclass_fields__ if name != "coupling_hz"}
    coupling = row["coupling_hz"]
    return Residue(
        **values,  # type: ignore[arg-type]
        coupling_hz=(float(coupling[0]), float(coupling[1])) if coupling else None,  # type: ignore[index]
    )
