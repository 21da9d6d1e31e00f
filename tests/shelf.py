"""The demo shelf as the engine sees it, read from the demo's CSV without a database."""

import csv
from datetime import date
from decimal import Decimal
from functools import cache

from labplan import datafiles
from labplan.chemistry.amounts import Content
from labplan.chemistry.forms import form_label
from labplan.chemistry.reference import find_by_cas, find_by_name
from labplan.planning.values import ShelfBottle

AS_OF = date(2026, 12, 1)
_TO_ENGINE = {"g": ("mass", 1e3), "kg": ("mass", 1e6), "mL": ("volume", 1.0),
              "L": ("volume", 1e3), "pieces": ("count", 1.0)}  # fmt: skip


@cache
def demo_shelf() -> tuple[ShelfBottle, ...]:
    with (datafiles.FOLDER / "demo" / "stock.csv").open(encoding="utf-8", newline="") as file:
        return tuple(_bottle(row) for row in csv.DictReader(file))


def _bottle(row: dict[str, str]) -> ShelfBottle:
    substance = find_by_cas(row["cas"]) or find_by_name(row["substance"])
    assert substance is not None, row
    measured_by, factor = _TO_ENGINE[row["unit"]]
    amount = float(row["amount"]) * factor
    density = float(row["density_g_per_ml"]) if row["density_g_per_ml"] else None
    return ShelfBottle(
        code=row["code"], substance=substance.key, name=substance.name, cas=substance.cas or "",
        smiles=substance.smiles or "", inchikey=substance.inchikey,
        content=_content(row, substance.molar_mass_g_per_mol, density),
        form_label=_label(row), measured_by=measured_by, on_hand=amount, held=0.0,
        usable=amount, place=row["place"], place_name=row["place"], lot=row["lot"],
        status=row["status"] or "usable", expires_on=_day(row["expires_on"]),
        opened_on=_day(row["opened_on"]),
        stabiliser_state={"": "not_applicable", "none": "none"}.get(row["stabiliser"], "known"),
        stabiliser_name=row["stabiliser"],
        water_ppm=float(row["water_ppm"]) if row["water_ppm"] else None,
        water_read_on=_day(row["water_read_on"]), activated_on=_day(row["activated_on"]),
        density_g_per_ml=density,
        loading_equiv_per_l=_loading(row),
        solvent=_solvent_key(row), solvent_name=row["solution_solvent"] or None,
    )  # fmt: skip


def _label(row: dict[str, str]) -> str:
    def number(column: str) -> Decimal | None:
        return Decimal(row[column]) if row[column] else None

    return form_label(
        row["form"] or "neat", hydrate_water=number("hydrate_water"), basis=row["solution_basis"],
        value=number("solution_value"), solvent_name=row["solution_solvent"] or None,
        active_share_pct=number("active_share_pct"),
    )  # fmt: skip


def _loading(row: dict[str, str]) -> float | None:
    return float(row["solution_value"]) if row["form"] == "loaded" else None


def _solvent_key(row: dict[str, str]) -> str | None:
    found = find_by_name(row["solution_solvent"]) if row["solution_solvent"] else None
    return found.key if found else None


def _content(
    row: dict[str, str], molar_mass: float | None, density: float | None
) -> Content | None:
    if molar_mass is None:
        return None
    return Content(
        molar_mass_g_per_mol=molar_mass, form=row["form"] or "neat",
        hydrate_water=float(row["hydrate_water"] or 0), solution_basis=row["solution_basis"],
        solution_value=float(row["solution_value"] or 0),
        active_share_pct=float(row["active_share_pct"]) if row["active_share_pct"] else None,
        assay_pct=float(row["assay_pct"]) if row["assay_pct"] else None,
        assay_of=row["assay_of"] or "as_is", assay_kind=row["assay_kind"] or "unspecified",
        density_g_per_ml=density,
    )  # fmt: skip


def _day(text: str) -> date | None:
    return date.fromisoformat(text) if text else None
