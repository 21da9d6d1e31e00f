"""Find or make the substance that a line of a stock list means."""

import re

from inventory.models import Substance
from inventory.services.csv_rows import Row
from labplan.chemistry import reference
from labplan.chemistry.structures import Structure, describe_smiles


class SubstanceFinder:
    """Looks in the database first, then in the packaged table, and makes what is neither.

    Identity goes by the whole InChIKey where there is a structure, by CAS number or name
    otherwise. One look at the database serves a whole file.
    """

    def __init__(self) -> None:
        known = list(Substance.objects.all())
        self._by_code = {substance.code: substance for substance in known}
        self._by_inchikey = {s.inchikey: s for s in known if s.inchikey}
        self._by_cas = {s.cas: s for s in known if s.cas}
        self._by_name = {s.search_key: s for s in known}

    def find(self, row: Row) -> Substance | None:
        """The substance of the bottle; None with an error on the row when it cannot be told."""
        cas, smiles = row.text("cas"), row.text("smiles")
        if cas and not reference.is_valid_cas(cas):
            row.error("cas", "bad_check_digit", f"{cas} is not a CAS number: check its digits.")
            return None
        row.choice("kind", ("", *Substance.Kind.values))
        name = row.text("substance")
        if len(name) > 200 or len(reference.search_key(name)) > 240:
            row.error("substance", "too_long", "At most 200 characters.")
            return None
        if smiles:
            return self._by_structure(row, smiles)
        numbered, named = self._by_number(cas), self.by_name(row.text("substance"))
        if numbered and named and numbered.code != named.code:
            row.error(
                "cas", "cas_and_name_differ",
                f"{cas} is {numbered.name}, but the name says {named.name}.",
            )  # fmt: skip
            return None
        found = numbered or named
        if found is None and row.text("kind") in ("material", "mixture"):
            return self._make_bare(row)
        if found is None:
            row.error(
                "substance", "unknown_substance",
                "Not in the packaged table: give its SMILES, or kind=material or mixture.",
            )  # fmt: skip
        return found

    def find_solvent(self, row: Row) -> Substance | None:
        name = row.text("solution_solvent")
        found = self.by_name(name) if name else None
        if name and found is None:
            row.error("solution_solvent", "unknown_substance", f"{name!r} is not known.")
        return found

    def by_name(self, name: str) -> Substance | None:
        known = self._by_name.get(reference.search_key(name))
        packaged = reference.find_by_name(name)
        return known or (self._from_reference(packaged) if packaged else None)

    def _by_number(self, cas: str) -> Substance | None:
        if not cas:
            return None
        packaged = reference.find_by_cas(cas)
        return self._by_cas.get(cas) or (self._from_reference(packaged) if packaged else None)

    def _by_structure(self, row: Row, smiles: str) -> Substance | None:
        try:
            structure = describe_smiles(smiles)
        except ValueError:
            row.error("smiles", "smiles_unreadable", "This SMILES cannot be read.")
            return None
        if not structure.inchikey:
            row.error(
                "smiles", "no_inchikey",
                "No InChIKey can be made of it: it has over 1023 atoms, or a wildcard (*).",
            )  # fmt: skip
            return None
        packaged = reference.find_by_inchikey(structure.inchikey)
        same_number = reference.find_by_cas(row.text("cas")) if row.text("cas") else None
        if same_number and same_number.inchikey not in (None, structure.inchikey):
            row.error(
                "cas", "cas_and_structure_differ",
                f"{row.text('cas')} is {same_number.name}, another structure than the SMILES.",
            )  # fmt: skip
            return None
        known = self._by_inchikey.get(structure.inchikey)
        if known or packaged:
            return known or self._from_reference(packaged)  # type: ignore[arg-type]
        return self._make_defined(row, structure)

    def _from_reference(self, row: reference.ReferenceSubstance) -> Substance:
        if row.key in self._by_code:
            return self._by_code[row.key]
        return self._keep(
            Substance(
                code=row.key, kind=row.kind, name=row.name,
                search_key=reference.search_key(row.name), cas=row.cas or "",
                smiles=row.smiles or "", inchikey=row.inchikey, formula=row.formula or "",
                molar_mass_g_per_mol=row.molar_mass_g_per_mol,
                density_g_per_ml=row.density_g_per_ml,
                density_temperature_c=row.density_temperature_c,
                density_source=row.density_source or "",
            )
        )  # fmt: skip

    def _make_defined(self, row: Row, structure: Structure) -> Substance:
        name = row.text("substance")
        return self._keep(
            Substance(
                code=self._free_code(name), kind="defined", name=name,
                search_key=reference.search_key(name), cas=row.text("cas"),
                smiles=structure.smiles, inchikey=structure.inchikey, formula=structure.formula,
                molar_mass_g_per_mol=structure.molar_mass_g_per_mol,
            )
        )  # fmt: skip

    def _make_bare(self, row: Row) -> Substance:
        name = row.text("substance")
        return self._keep(
            Substance(
                code=self._free_code(name), kind=row.text("kind"), name=name,
                search_key=reference.search_key(name), cas=row.text("cas"),
            )
        )  # fmt: skip

    def _free_code(self, name: str) -> str:
        """A code made from the name; one that a packaged row uses is never taken."""
        base = re.sub(r"[^a-z0-9]+", "-", reference.search_key(name)).strip("-")[:70] or "substance"
        code, number = base, 2
        while code in self._by_code or reference.find_by_key(code):
            code, number = f"{base}-{number}", number + 1
        return code

    def _keep(self, substance: Substance) -> Substance:
        substance.save()
        self._by_code[substance.code] = substance
        self._by_name[substance.search_key] = substance
        if substance.inchikey:
            self._by_inchikey[substance.inchikey] = substance
        if substance.cas:
            self._by_cas[substance.cas] = substance
        return substance
