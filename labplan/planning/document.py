"""The plan as a document: numbers as Decimals with the digits that are meant, bottles by code.

It holds everything a reader needs later without this program: final texts, the hash of each
method and hazard row used, and the versions that made it.
"""

from dataclasses import asdict
from datetime import date
from decimal import ROUND_HALF_UP, Decimal
from typing import Any

from labplan import datafiles
from labplan.chemistry.structures import Structure, rdkit_version
from labplan.planning.plan import Plan
from labplan.planning.steps import amount_text
from labplan.planning.values import Charge, Expectations, Route, Stage, Water
from labplan.safety.hazards import Hazards, hazards_of

ENGINE_VERSION = "0.1.0"
FORMAT = "labplan-procedure-1"
CAUTIONS = (
    "labplan is a planning aid. A qualified chemist checks and approves this sheet before work "
    "starts; local rules come first.",
    "The supplier's safety data sheet of the bottle in hand is the authority on its hazards.",
    "Work in a hood, protect eyes and hands, do not work alone. No scale-up without a hazard "
    "review.",
)


def number(value: float | None, places: int) -> Decimal | None:
    """Round half up to a number of decimals; None stays None."""
    if value is None:
        return None
    return Decimal(repr(value)).quantize(Decimal(1).scaleb(-places), rounding=ROUND_HALF_UP)


def plan_document(plan: Plan, *, as_of: date) -> dict[str, Any]:
    """The answer of a plan as plain data: Decimals, strings, lists, dicts."""
    target = plan.target
    return {
        "format": FORMAT,
        "as_of": as_of.isoformat(),
        "versions": {
            "engine": ENGINE_VERSION,
            "data": datafiles.data_version(),
            "rdkit": rdkit_version(),
        },
        "target": {"name": target.name, **_structure(target.structure)},
        "verdict": plan.verdict,
        "reasons": [asdict(reason) for reason in plan.reasons],
        "coupling": {
            "donor": {"name": target.donor_name, **_structure(target.donor)},
            "acceptor": {"name": target.acceptor_name, **_structure(target.acceptor)},
            "residue": target.residue_name,
            "anomer": target.anomer,
            "relation": target.relation,
        },
        "route": _route(plan.route, plan) if plan.route else None,
        "hazards": [_hazards(h) for h in _route_hazards(plan)],
        "expectations": _expectations(plan.expectations) if plan.expectations else None,
        "cautions": list(CAUTIONS),
        "rows_used": _rows_used(plan),
    }


def _structure(structure: Structure) -> dict[str, Any]:
    return {
        "smiles": structure.smiles,
        "inchikey": structure.inchikey,
        "formula": structure.formula,
        "molar_mass_g_per_mol": number(structure.molar_mass_g_per_mol, 3),
        "monoisotopic_mass_da": number(structure.monoisotopic_mass_da, 4),
    }


def _route(route: Route, plan: Plan) -> dict[str, Any]:
    return {
        "available": route.is_available,
        "why": list(route.why),
        "warnings": [asdict(warning) for warning in route.warnings],
        "shortages": [asdict(shortage) for shortage in route.shortages],
        "passed_over": [asdict(passed) for passed in route.passed_over],
        "stages": [_stage(stage, plan) for stage in route.stages],
    }


def _stage(stage: Stage, plan: Plan) -> dict[str, Any]:
    method = plan.method or {}
    return {
        "kind": stage.kind,
        "method": {"key": stage.method, "name": method["name"], "sources": _sources(method)},
        "limiting": stage.limiting,
        "scale_mmol": number(stage.scale_mmol, 4),
        "charges": [_charge(charge) for charge in stage.charges],
        "water": _water(stage.water),
        "vessel_ml": stage.vessel_ml,
        "quench": {
            "vessel_ml": stage.quench_vessel_ml,
            "acid_mmol": number(stage.quench_anions_mmol, 2),
            "carbon_dioxide_l": number(stage.carbon_dioxide_l, 2),
        },
        "expected": {
            "yield_pct": stage.yield_pct[1],
            "yield_low_pct": stage.yield_pct[0],
            "yield_high_pct": stage.yield_pct[2],
            "mass_mg": number(stage.expected_mass_mg, 1),
            "mass_low_mg": number(stage.expected_low_mg, 0),
            "mass_high_mg": number(stage.expected_high_mg, 0),
            "gross_crude_mg": number(stage.gross_crude_mg, 0),
        },
        "steps": [asdict(step) for step in stage.steps],
    }


def _charge(charge: Charge) -> dict[str, Any]:
    bottle = charge.bottle
    return {
        "key": charge.key,
        "role": charge.role,
        "group": charge.group,
        "substance": charge.substance,
        "name": charge.name,
        "form": bottle.form_label if bottle else None,
        "bottle": bottle.code if bottle else None,
        "lot": bottle.lot if bottle else None,
        "place": bottle.place if bottle else None,
        "place_name": bottle.place_name if bottle else None,
        "equivalents_planned": number(charge.equivalents_planned, 3),
        "equivalents": number(charge.equivalents, 3),
        "equivalents_of": charge.equivalents_of,
        "amount_mmol": number(charge.amount_mmol, 4),
        "mass_mg": number(charge.mass_mg, 1),
        "volume_ml": number(charge.volume_ml, 3),
        "dispense": charge.dispense,
        "amount_text": amount_text(charge),
        "assay": charge.assay_note or None,
        "density_g_per_ml": number(bottle.density_g_per_ml, 4) if bottle else None,
    }


def _water(water: Water) -> dict[str, Any]:
    return {
        "lines": [{"charge": key, "amount_mmol": number(mmol, 4)} for key, mmol in water.lines],
        "total_mmol": number(water.total_mmol, 4),
        "promoter_share_pct": number(water.promoter_share_pct, 2),
        "donor_share_pct": number(water.donor_share_pct, 2),
    }


def _expectations(expected: Expectations) -> dict[str, Any]:
    return {
        "ions": [
            {"species": ion.species, "ion": ion.ion, "mz": number(ion.mz, 4)}
            for ion in expected.ions
        ],
        "side_products": [
            {
                "name": side.name,
                "formula": side.formula,
                "monoisotopic_mass_da": number(side.monoisotopic_mass_da, 4),
                "told_apart_by": side.told_apart_by,
            }
            for side in expected.side_products
        ],
        "anomeric_signal": {
            "coupling_hz": list(map(_one_place, expected.anomeric_coupling_hz))
            if expected.anomeric_coupling_hz
            else None,
            "text": expected.anomeric_signal,
        },
    }


def _one_place(value: float) -> Decimal | None:
    return number(value, 1)


def _route_hazards(plan: Plan) -> list[Hazards]:
    """One entry a substance on the sheet, worst known first, then the unknown, then the product."""
    if plan.route is None or not plan.route.stages:
        return []
    names = {
        charge.substance: charge.name for stage in plan.route.stages for charge in stage.charges
    }
    found = [hazards_of(key, name) for key, name in names.items()]
    order = {"Danger": 0, "Warning": 1, None: 3}
    found.sort(key=lambda h: (2 if not h.established else order[h.signal_word], h.name))
    product = plan.target.name or "the product"
    return [*found, hazards_of("made here", f"{product} (product, made here)")]


def _hazards(hazards: Hazards) -> dict[str, Any]:
    plain = asdict(hazards)
    del plain["row"]
    return plain


def _sources(row: dict[str, Any]) -> list[dict[str, Any]]:
    known = {source["key"]: source for source in datafiles.table("sources")["sources"]}
    return [
        {"key": key, "citation": known[key]["citation"], "doi": known[key]["doi"]}
        for key in row["sources"]
    ]


def _rows_used(plan: Plan) -> list[dict[str, str]]:
    rows = []
    if plan.method is not None and plan.route is not None:
        rows.append(("methods", plan.method["key"], plan.method))
    rows += [
        ("classifications", hazards.substance, hazards.row)
        for hazards in _route_hazards(plan)
        if hazards.row is not None
    ]
    return [
        {"table": table, "key": key, "sha256": datafiles.row_hash(row)}
        for table, key, row in sorted(rows, key=lambda item: item[:2])
    ]
