"""The packaged substances: names, structures and densities with their sources."""

import unicodedata
from dataclasses import dataclass
from functools import cache

from labplan import datafiles
from labplan.chemistry.structures import describe_smiles

_GREEK = {
    "α": "alpha", "β": "beta", "γ": "gamma", "δ": "delta", "µ": "u", "μ": "u", "ω": "omega",
}  # fmt: skip


@dataclass(frozen=True)
class ReferenceSubstance:
    """One packaged substance; density in g/mL at a temperature in °C, with its source's key."""

    key: str
    name: str
    kind: str
    cas: str | None
    smiles: str | None
    inchikey: str | None
    formula: str | None
    molar_mass_g_per_mol: float | None
    density_g_per_ml: float | None
    density_temperature_c: float | None
    density_source: str | None
    boiling_point_c: float | None
    search_keys: frozenset[str]
    tags: frozenset[str]


def search_key(name: str) -> str:
    """A name as it is compared: no accents, no case, Greek letters spelt, no extra spaces.

    >>> search_key("β-D-Glucose  Pentaacetate")
    'beta-d-glucose pentaacetate'
    """
    spelt = "".join(_GREEK.get(character, character) for character in name)
    plain = unicodedata.normalize("NFKD", spelt)
    kept = "".join(c for c in plain if not unicodedata.combining(c))
    return " ".join(kept.casefold().split())


@cache
def reference_substances() -> tuple[ReferenceSubstance, ...]:
    return tuple(_read(row) for row in datafiles.table("substances")["substances"])


def find_by_inchikey(inchikey: str) -> ReferenceSubstance | None:
    return _index("inchikey").get(inchikey)


def find_by_cas(cas: str) -> ReferenceSubstance | None:
    return _index("cas").get(cas)


def find_by_key(key: str) -> ReferenceSubstance | None:
    return _index("key").get(key)


def find_by_name(name: str) -> ReferenceSubstance | None:
    wanted = search_key(name)
    return next((row for row in reference_substances() if wanted in row.search_keys), None)


def is_valid_cas(cas: str) -> bool:
    """The last digit is the weighted sum of the others, modulo 10 (CAS, check digit).

    >>> is_valid_cas("75-09-2"), is_valid_cas("75-09-3")
    (True, False)
    """
    parts = cas.split("-")
    shape = [len(part) for part in parts]
    if len(shape) != 3 or not 2 <= shape[0] <= 7 or shape[1:] != [2, 1]:
        return False
    if not cas.replace("-", "").isascii() or not cas.replace("-", "").isdigit():
        return False
    digits = (parts[0] + parts[1])[::-1]
    total = sum(weight * int(digit) for weight, digit in enumerate(digits, start=1))
    return total % 10 == int(parts[2])


@cache
def _index(attribute: str) -> dict[str, ReferenceSubstance]:
    rows = reference_substances()
    return {value: row for row in rows if (value := getattr(row, attribute)) is not None}


def _read(row: dict[str, object]) -> ReferenceSubstance:
    properties = {p["name"]: p for p in row["properties"]}  # type: ignore[attr-defined]
    density = properties.get("density_g_per_ml", {})
    smiles = row["smiles"]
    structure = describe_smiles(str(smiles)) if smiles else None
    molar_mass = properties.get("molar_mass_g_per_mol", {}).get("value")
    names = [row["name"], row["key"], *row["other_names"]]  # type: ignore[misc]
    return ReferenceSubstance(
        key=str(row["key"]),
        name=str(row["name"]),
        kind=str(row["kind"]),
        cas=str(row["cas"]) if row["cas"] else None,
        smiles=structure.smiles if structure else None,
        inchikey=structure.inchikey if structure else None,
        formula=structure.formula if structure else None,
        molar_mass_g_per_mol=structure.molar_mass_g_per_mol if structure else molar_mass,
        density_g_per_ml=density.get("value"),
        density_temperature_c=density.get("temperature_c"),
        density_source=density.get("source"),
        boiling_point_c=properties.get("boiling_point_c", {}).get("value"),
        search_keys=frozenset(search_key(str(name)) for name in names),
        tags=frozenset(row["tags"]),  # type: ignore[call-overload]
    )
