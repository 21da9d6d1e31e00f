"""The plan as a document: numbers as Decimals with the digits that are meant, bottles by code.

It holds everything a reader needs later without this program: final texts, the hash of each
method and hazard row used, and the versions that made it.
"""

from dataclasses import asdict
from datetime import date
from decimal import ROUND_HALF_UP, Decimal
from typing import Any

from labplan import datafiles
from labplan.chemistry.amounts import weighed_molar_mass
from labplan.chemistry.coupling import Target
from labplan.chemistry.structures import Structure, rdkit_version
from labplan.planning.methods import method_row
from labplan.planning.plan import Plan
from labplan.planning.steps import amount_text, name_text
from labplan.planning.values import Charge, Expectations, Ion, Quench, Route, Stage, Water
from labplan.safety.hazards import Hazards, hazards_of, solution_key

ENGINE_VERSION = "0.2.0"
FORMAT = "labplan-procedure-1"
CAUTIONS = (
    "labplan is a planning aid. A qualified chemist checks and approves this sheet before work "
    "starts; local rules come first.",
    "The supplier's safety data sheet of the bottle in hand is the authority on its hazards.",
    "Work in a hood, protect eyes and hands, do not work alone. No scale-up without a hazard "
    "review.",
)
PRODUCT_KEY = "made here"


def number(value: float | None, places: int) -> Decimal | None:
    """Round half up to a number of decimals; None stays None."""
    if value is None:
        return None
    return Decimal(repr(value)).quantize(Decimal(1).scaleb(-places), rounding=ROUND_HALF_UP)


def plan_document(plan: Plan, *, as_of: date) -> dict[str, Any]:
    """The answer of a plan as plain data: Decimals, strings, lists, dicts."""
    target, route = plan.target, plan.route
    return {
        "format": FORMAT,
        "as_of": as_of.isoformat(),
        "versions": {
            "engine": ENGINE_VERSION,
            "data": datafiles.data_version(),
            "rdkit": rdkit_version(),
        },
        **coupling_document(target),
        "verdict": plan.verdict,
        "reasons": [asdict(reason) for reason in plan.reasons],
        "route": route_document(route) if route else None,
        "other_routes": [
            {
                "rank": other.rank,
                "method": other.method,
                "name": other.method_name,
                "available": other.is_available,
                "shortages": [asdict(shortage) for shortage in other.shortages],
            }
            for other in plan.routes[1:]
        ],
        "hazards": [_hazards(h) for h in _route_hazards(plan)],
        "expectations": expectations_document(plan.expectations) if plan.expectations else None,
        "cautions": list(CAUTIONS),
        "drawings": _drawings(plan),
        "rows_used": _rows_used(plan),
    }


def coupling_document(target: Target) -> dict[str, Any]:
    """The target and what it is made from."""
    return {
        "target": {"name": target.name, **_structure(target.structure)},
        "coupling": {
            "donor": {"name": target.donor_name, **_structure(target.donor)},
            "acceptor": {"name": target.acceptor_name, **_structure(target.acceptor)},
            "glycoside": {"name": target.glycoside_name, **_structure(target.glycoside)},
            "residue": target.residue_name,
            "anomer": target.anomer,
            "relation": target.relation,
        },
    }


def _structure(structure: Structure) -> dict[str, Any]:
    return {
        "smiles": structure.smiles,
        "inchikey": structure.inchikey,
        "formula": structure.formula,
        "molar_mass_g_per_mol": number(structure.molar_mass_g_per_mol, 3),
        "monoisotopic_mass_da": number(structure.monoisotopic_mass_da, 4),
    }


def _drawings(plan: Plan) -> list[dict[str, Any]]:
    """The scheme, one SVG a structure and all at one scale; of what is refused the target alone."""
    # Loaded with the first document: a preview draws nothing and need not carry it.
    from labplan.chemistry.drawing import draw

    target = plan.target
    parts = {"target": target.structure}
    if plan.route is not None:
        parts = {"donor": target.donor, "acceptor": target.acceptor, "glycoside": target.glycoside}
        if target.needs_deacetylation:
            parts["target"] = target.structure
    drawn = {key: draw(structure.smiles) for key, structure in parts.items()}
    return [
        {
            "key": key,
            "svg": drawing.svg,
            "width_mm": number(drawing.width_mm, 1),
            "height_mm": number(drawing.height_mm, 1),
        }
        for key, drawing in drawn.items()
    ]


def route_document(route: Route) -> dict[str, Any]:
    return {
        "rank": route.rank,
        "method": route.method,
        "available": route.is_available,
        "why": list(route.why),
        "warnings": [asdict(warning) for warning in route.warnings],
        "shortages": [asdict(shortage) for shortage in route.shortages],
        "passed_over": [asdict(passed) for passed in route.passed_over],
        "stages": [_stage(stage) for stage in route.stages],
    }


def _stage(stage: Stage) -> dict[str, Any]:
    sources = _sources(method_row(stage.method))
    low, planned, high = stage.yield_pct
    return {
        "number": stage.number,
        "kind": stage.kind,
        "method": {"key": stage.method, "name": stage.method_name, "sources": sources},
        "limiting": stage.limiting,
        "scale_mmol": number(stage.scale_mmol, 4),
        "provisional": stage.is_provisional,
        "product": {"name": stage.product_name, **_structure(stage.product)},
        "charges": [_charge(charge) for charge in stage.charges],
        "water": _water(stage.water) if stage.water else None,
        "vessel_ml": stage.vessel_ml,
        "quench": _quench(stage.quench) if stage.quench else None,
        "adiabatic_rise_k": number(stage.adiabatic_rise_k, 0),
        "expected": {
            "yield_pct": number(planned, 0),
            "yield_low_pct": number(low, 0),
            "yield_high_pct": number(high, 0),
            "mass_mg": number(stage.expected_mass_mg, 1),
            "mass_low_mg": number(stage.expected_low_mg, 0),
            "mass_high_mg": number(stage.expected_high_mg, 0),
            "gross_mass_mg": number(stage.gross_mass_mg, 1),
            "gross_means": stage.gross_means,
        },
        "ions": _ions(stage.ions),
        "steps": [asdict(step) for step in stage.steps],
    }


def _quench(quench: Quench) -> dict[str, Any]:
    return {
        "vessel_ml": quench.vessel_ml,
        "acid_mmol": number(quench.acid_mmol, 2),
        "bicarbonate_mmol": number(quench.bicarbonate_mmol, 1),
        "clear_solution_ml": number(quench.clear_solution_ml, 0),
        "carbon_dioxide_l": number(quench.carbon_dioxide_l, 2),
    }


def _charge(charge: Charge) -> dict[str, Any]:
    bottle = charge.bottle
    return {
        "key": charge.key,
        "role": charge.role,
        "group": charge.group,
        "substance": charge.substance,
        "name": charge.name,
        "cas": (bottle.cas or None) if bottle else None,
        "printed_name": name_text(charge),
        "form": bottle.form_label if bottle else None,
        "bottle": bottle.code if bottle else None,
        "from_stage": charge.from_stage,
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
        "molar_mass_g_per_mol": number(weighed_molar_mass(bottle.content), 3)
        if bottle and bottle.content
        else None,
    }


def _water(water: Water) -> dict[str, Any]:
    return {
        "lines": [{"charge": key, "amount_mmol": number(mmol, 4)} for key, mmol in water.lines],
        "total_mmol": number(water.total_mmol, 4),
        "promoter_share_pct": number(water.promoter_share_pct, 2),
        "donor_share_pct": number(water.donor_share_pct, 2),
    }


def _ions(ions: tuple[Ion, ...]) -> list[dict[str, Any]]:
    return [{"species": i.species, "ion": i.ion, "mz": number(i.mz, 4)} for i in ions]


def expectations_document(expected: Expectations) -> dict[str, Any]:
    hz, mass = expected.anomeric_coupling_hz, expected.mass_mg
    return {
        "mass_mg": dict(zip(("low", "planned", "high"), (number(m, 0) for m in mass), strict=True))
        if mass
        else None,
        "ions": _ions(expected.ions),
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
            "coupling_hz": [number(value, 1) for value in hz] if hz else None,
            "text": expected.anomeric_signal,
        },
    }


def _route_hazards(plan: Plan) -> list[Hazards]:
    """One entry a substance on the sheet, worst known first, then the unknown, then what is made.

    A solution brings the hazards of its solvent with it.
    """
    if plan.route is None:
        return []
    names: dict[str, str] = {}
    made: dict[str, str] = {}
    for stage in plan.route.stages:
        made[stage.product.inchikey] = f"{stage.product_name} (made in stage {stage.number})"
        for charge in stage.charges:
            if charge.from_stage is not None:
                continue
            for key, name in _opened(charge):
                names.setdefault(key, name)
    found = [hazards_of(key, name) for key, name in names.items()]
    order = {"Danger": 0, "Warning": 1, None: 3}
    found.sort(key=lambda h: (2 if not h.established else order[h.signal_word], h.name))
    return [*found, *(hazards_of(PRODUCT_KEY, name) for name in made.values())]


def _opened(charge: Charge) -> list[tuple[str, str]]:
    """What is in the bottle of a charge: a solution has a row of its own, or that of its parts."""
    bottle = charge.bottle
    if bottle is None or not bottle.solvent or not bottle.solvent_name:
        return [(charge.substance, charge.name)]
    whole = solution_key(charge.substance, bottle.solvent)
    if whole is not None:
        return [(whole, name_text(charge))]
    return [(charge.substance, name_text(charge)), (bottle.solvent, bottle.solvent_name)]


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
    stages = plan.route.stages if plan.route else ()
    rows = [("methods", stage.method, method_row(stage.method)) for stage in stages]
    rows += [
        ("classifications", hazards.substance, hazards.row)
        for hazards in _route_hazards(plan)
        if hazards.row is not None
    ]
    return [
        {"table": table, "key": key, "sha256": datafiles.row_hash(row)}
        for table, key, row in sorted(rows, key=lambda item: item[:2])
    ]
