"""One stage as a block of the sheet: charges, figures, steps with what is to be written down."""

import re
from decimal import Decimal
from typing import Any

from labplan.planning.figures import mass_text, three_figures, two_figures, volume_text
from labplan.procedures.sheet.typography import Rich, heading_name, set_formula, set_text

SUPPLY = "supply"
_IS_SAMPLED = re.compile(r"\b(?:TLC|LC-MS)\b")
_WEIGHS_CRUDE = re.compile(r"\bweigh the crude\b", re.IGNORECASE)


def stage_view(stage: dict[str, Any], stages: list[dict[str, Any]]) -> dict[str, Any]:
    """The block of one stage; `stages` are all of them, for what comes from an earlier one."""
    made = {other["number"]: other["product"] for other in stages}
    charges = {charge["key"]: charge for charge in stage["charges"]}
    last = stage["steps"][-1]["number"] if stage["steps"] else None
    return {
        "number": stage["number"],
        "kind": stage["kind"].capitalize(),
        "method": set_text(stage["method"]["name"]),
        "flask": set_text(
            f"{stage['scale_mmol']} mmol of {stage['limiting']}, {stage['vessel_ml']} mL flask"
        ),
        "provisional": stage["provisional"],
        "product": set_text(stage["product"]["name"]),
        "product_formula": set_formula(stage["product"]["formula"]),
        "product_molar_mass": f"{stage['product']['molar_mass_g_per_mol']} g/mol",
        "charges": [
            _charge(charge, made) for charge in stage["charges"] if charge["group"] == "reaction"
        ],
        "others": [_other(charge) for charge in stage["charges"] if charge["group"] != "reaction"],
        "figures": _figures(stage, charges),
        "expected": _expected(stage["expected"]),
        "steps": [_step(step, charges, step["number"] == last) for step in stage["steps"]],
        "sources": [set_text(_source(source)) for source in stage["method"]["sources"]],
    }


def _charge(charge: dict[str, Any], made: dict[int, dict[str, Any]]) -> dict[str, Any]:
    planned, real = charge["equivalents_planned"], charge["equivalents"]
    return {
        **_where(charge),
        "role": charge["role"],
        "name": _name(charge),
        "identity": _identity(charge, made),
        "assay": set_text(charge["assay"]),
        "equivalents": f"{planned} → {real}" if planned else "",
        "amount_mmol": charge["amount_mmol"] or "",
        "take": set_text(charge["amount_text"]),
        "also": set_text(_other_quantity(charge)),
    }


def _other(charge: dict[str, Any]) -> dict[str, Any]:
    return {
        **_where(charge),
        "role": charge["role"],
        "name": _name(charge),
        "place_code": charge["place"] or "",
        "lot_code": charge["lot"] or "",
        "take": set_text(charge["amount_text"]),
    }


def _where(charge: dict[str, Any]) -> dict[str, str]:
    """What to look for on the shelf: a code as on the label, the place, the lot."""
    if charge["from_stage"] is not None:
        return {"bottle": f"stage {charge['from_stage']}", "place": "made here", "lot": ""}
    if charge["bottle"] is None:
        return {"bottle": SUPPLY, "place": "laboratory supply", "lot": ""}
    place = charge["place"]
    if charge["place_name"] and charge["place_name"] != place:
        place = f"{place}, {charge['place_name']}"
    lot = f"lot {charge['lot']}" if charge["lot"] else ""
    return {"bottle": charge["bottle"], "place": place, "lot": lot}


def _name(charge: dict[str, Any]) -> Rich:
    name = heading_name(charge["name"])
    has_form = charge["form"] and charge["form"] != "neat"
    return set_text(f"{name}, {charge['form']}" if has_form else name)


def _identity(charge: dict[str, Any], made: dict[int, dict[str, Any]]) -> list[Rich]:
    """CAS number and molar mass, and the density a volume was reckoned with."""
    molar_mass = charge["molar_mass_g_per_mol"]
    if charge["from_stage"] is not None:
        molar_mass = made[charge["from_stage"]]["molar_mass_g_per_mol"]
    parts = (
        f"CAS {charge['cas']}" if charge["cas"] else "",
        f"{molar_mass} g/mol" if molar_mass else "",
        f"{charge['density_g_per_ml']} g/mL" if charge["density_g_per_ml"] else "",
    )
    return [set_text(part) for part in parts if part]


def _other_quantity(charge: dict[str, Any]) -> str:
    """The mass of what is measured by volume, the volume of a liquid that is weighed."""
    density = charge["density_g_per_ml"]
    if charge["dispense"] == "volume":
        if charge["mass_mg"] is not None:
            return mass_text(float(charge["mass_mg"]))
        if density and charge["volume_ml"] is not None:
            return f"{three_figures(float(Decimal(charge['volume_ml']) * Decimal(density)))} g"
        return ""
    if charge["volume_ml"] is not None:
        return volume_text(float(charge["volume_ml"]))
    if density and charge["mass_mg"] is not None:
        return volume_text(float(Decimal(charge["mass_mg"]) / 1000 / Decimal(density)))
    return ""


def _figures(stage: dict[str, Any], charges: dict[str, Any]) -> list[dict[str, Any]]:
    """Heat, quench and water, each where the stage has them. `strong` is printed bold."""
    lines = []
    if stage["adiabatic_rise_k"]:
        text = f"about {stage['adiabatic_rise_k']} K if all the heat stayed in the flask."
        lines.append(_figure("Heat", text, strong=True))
    quench = stage["quench"]
    if quench:
        text = (
            f"{quench['acid_mmol']} mmol of acid against {quench['bicarbonate_mmol']} mmol of "
            f"bicarbonate, in an open {quench['vessel_ml']} mL beaker; carbon dioxide "
            f"up to {two_figures(float(quench['carbon_dioxide_l']))} L."
        )
        lines.append(_figure("Quench", text))
    if stage["water"]:
        lines += _water(stage["water"], charges)
    return lines


def _water(water: dict[str, Any], charges: dict[str, Any]) -> list[dict[str, Any]]:
    known = [line for line in water["lines"] if line["amount_mmol"] is not None]
    unknown = [line for line in water["lines"] if line["amount_mmol"] is None]
    counted = "; ".join(
        f"{charges[line['charge']]['printed_name']} {line['amount_mmol']} mmol" for line in known
    )
    total = (
        f"together {water['total_mmol']} mmol, {water['promoter_share_pct']} % of the promoter "
        f"and {water['donor_share_pct']} % of the donor."
    )
    lines = [_figure("Water", f"{counted}; {total}" if counted else total.capitalize())]
    if unknown:
        names = ", ".join(charges[line["charge"]]["printed_name"] for line in unknown)
        lines.append(_figure("Water unknown", f"measure it: {names}.", strong=True))
    return lines


def _figure(label: str, text: str, *, strong: bool = False) -> dict[str, Any]:
    return {"label": label, "text": set_text(text), "strong": strong}


def _expected(expected: dict[str, Any]) -> dict[str, Any]:
    mass, low, high, gross = (
        mass_text(float(expected[key]))
        for key in ("mass_mg", "mass_low_mg", "mass_high_mg", "gross_mass_mg")
    )
    return {
        "mass": set_text(mass),
        "yield": set_text(f"{expected['yield_pct']} %"),
        "range": set_text(
            f"{low} to {high} ({expected['yield_low_pct']} to {expected['yield_high_pct']} %)"
        ),
        "gross": set_text(f"{gross} is {expected['gross_means']}"),
    }


def _step(step: dict[str, Any], charges: dict[str, Any], is_last: bool) -> dict[str, Any]:
    said = f"{step['text']} {step['watch']}"
    weighed = ["product weighed"] if is_last else []
    if not is_last and _WEIGHS_CRUDE.search(step["text"]):
        weighed = ["crude weighed"]
    return {
        "number": step["number"],
        "title": set_text(step["title"]),
        "text": set_text(step["text"]),
        "watch": set_text(step["watch"]),
        "pause": set_text(step["pause"][:1].upper() + step["pause"][1:]),
        "must_go_on": step["pause"] == "do not stop",
        "amounts": [_box(charges[key]) for key in step["charges"]],
        "weighed": weighed,
        "is_sampled": bool(_IS_SAMPLED.search(said)),
    }


def _box(charge: dict[str, Any]) -> dict[str, Any]:
    """What is written beside a step: the bottle by its code, never a name cut short."""
    bottle = _where(charge)["bottle"]
    return {
        "bottle": heading_name(charge["name"]).split(",")[0].lower()
        if bottle == SUPPLY
        else bottle,
        "role": set_text(charge["role"]),
        "planned": set_text(charge["amount_text"]),
    }


def _source(source: dict[str, Any]) -> str:
    citation = source["citation"].rstrip(".")
    return f"{citation}, doi {source['doi']}." if source["doi"] else f"{citation}."
