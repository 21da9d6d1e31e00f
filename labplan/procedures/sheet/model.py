"""One view of the stored document for both papers: what is printed, in order, typeset.

Plain values only: text, `Rich` text and lists of them, so that HTML and PDF cannot differ in
what they say. Nothing is planned or rounded here beyond showing a liquid's other quantity.
"""

from dataclasses import dataclass
from decimal import ROUND_HALF_UP, Decimal
from typing import Any

from labplan.planning.figures import mass_text
from labplan.procedures.sheet.hazard_lines import hazard_lines
from labplan.procedures.sheet.scheme import scheme
from labplan.procedures.sheet.stages import stage_view
from labplan.procedures.sheet.typography import Rich, heading_name, set_formula, set_ion, set_text

SHORT_HASH = 12
# what a state means to somebody who finds the paper on a bench
_STATES = {
    "planned": "not yet approved (planned)",
    "refused": "not to be run (refused)",
    "short": "the shelf does not hold enough (short)",
    "cancelled": "not to be run (cancelled)",
    "lapsed": "plan it again (lapsed)",
}
_NOT_TO_BE_SIGNED = ("refused", "short", "cancelled", "lapsed")


@dataclass(frozen=True)
class Heading:
    """Whose procedure it is; everything else is in the document."""

    code: str
    state: str
    project_code: str
    project_title: str
    requested_by: str
    requested_by_name: str
    scale: str
    sha256: str
    seal: str = ""  # the newest when the document was stored


def sheet_view(document: dict[str, Any], heading: Heading) -> dict[str, Any]:
    """Everything printed, in the order of printing; a part that does not apply is empty."""
    route = document["route"] or {}
    stages = [stage_view(stage, route["stages"]) for stage in route.get("stages", [])]
    target = document["target"]
    name = heading_name(target["name"] or "")
    return {
        "language": "en",
        "title": f"{heading.code}: {set_text(name).plain or target['formula']}",
        "code": heading.code,
        "short_hash": heading.sha256[:SHORT_HASH],
        "state": _STATES.get(heading.state, heading.state),
        "name": set_text(name) if name else Rich([("", "Glycoside without a name in the table")]),
        "formula": set_formula(target["formula"]),
        "molar_mass": f"{target['molar_mass_g_per_mol']} g/mol",
        "scale": heading.scale,
        "facts": _facts(document, heading),
        "smiles": target["smiles"],
        "scheme": scheme(document),
        "cautions": [set_text(line) for line in document["cautions"]],
        "reasons": [
            {"text": set_text(r["detail"]), "code": r["code"]} for r in document["reasons"]
        ],
        "why": [set_text(line) for line in route.get("why", [])],
        "warnings": [
            {"severity": w["severity"], "text": set_text(w["detail"])}
            for w in route.get("warnings", [])
        ],
        "shortages": [_shortage(line) for line in route.get("shortages", [])],
        "hazards": hazard_lines(document["hazards"]),
        "stages": stages,
        "may_be_signed": bool(stages) and heading.state not in _NOT_TO_BE_SIGNED,
        "expectations": _expectations(document) if stages else None,
        "passed_over": [
            {
                "bottle": line["bottle"],
                "name": set_text(heading_name(line["name"])),
                "role": line["role"],
                "reason": set_text(line["reason"]),
            }
            for line in route.get("passed_over", [])
        ],
    }


def _facts(document: dict[str, Any], heading: Heading) -> list[dict[str, str]]:
    person = heading.requested_by
    if heading.requested_by_name:
        person = f"{person}, {heading.requested_by_name}"
    versions = document["versions"]
    facts = (
        ("Project", f"{heading.project_code}, {heading.project_title}", ""),
        ("Requested by", person, ""),
        ("Shelf as of", document["as_of"], ""),
        (
            "Made with",
            f"engine {versions['engine']}, data {versions['data']}, RDKit {versions['rdkit']}",
            "",
        ),
        ("InChIKey", document["target"]["inchikey"], "code"),
        ("Document", heading.sha256, "code"),
        (
            "Book seal (for the stock keeper)",
            heading.seal or "none yet",
            "code" if heading.seal else "",
        ),
    )
    return [{"label": label, "value": value, "style": style} for label, value, style in facts]


def _shortage(line: dict[str, Any]) -> dict[str, Any]:
    return {
        "stage": line["stage"],
        "role": line["role"],
        "name": set_text(heading_name(line["name"])),
        "needed": set_text(line["needed"]),
        "largest": set_text(line["largest_usable"]),
        "detail": set_text(line["detail"]),
    }


def _expectations(document: dict[str, Any]) -> dict[str, Any]:
    expected, stages = document["expectations"], document["route"]["stages"]
    return {
        "ion_names": [set_ion(ion) for ion in _ion_names(stages)],
        "ion_rows": _ion_rows(stages),
        "signal": set_text(expected["anomeric_signal"]["text"]),
        "side_products": [
            {
                "name": set_text(heading_name(side["name"])),
                "formula": set_formula(side["formula"]),
                "mass": side["monoisotopic_mass_da"],
                "told_apart_by": set_text(side["told_apart_by"]),
            }
            for side in expected["side_products"]
        ],
        "whole": _whole_route(expected["mass_mg"], len(stages)),
    }


def _whole_route(mass_mg: dict[str, str] | None, stages: int) -> Rich:
    if mass_mg is None or stages == 1:
        return Rich()
    low, planned, high = (mass_text(float(mass_mg[key])) for key in ("low", "planned", "high"))
    return set_text(
        f"The whole route: {planned} of product, {low} to {high} with the ranges of the yields "
        "taken together."
    )


def _ion_names(stages: list[dict[str, Any]]) -> list[str]:
    return list(dict.fromkeys(ion["ion"] for stage in stages for ion in stage["ions"]))


def _ion_rows(stages: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """One row a stage and species, one column an ion; a gap where an ion is not looked for."""
    names, rows = _ion_names(stages), []
    for stage in stages:
        for species in dict.fromkeys(ion["species"] for ion in stage["ions"]):
            found = {i["ion"]: i["mz"] for i in stage["ions"] if i["species"] == species}
            rows.append(
                {
                    "stage": str(stage["number"]),
                    "species": set_text(heading_name(species)),
                    "values": [found.get(name, "") for name in names],
                }
            )
    return rows


def scale_text(product_mass_mg: Decimal | None, acceptor_amount_mmol: Decimal | None) -> str:
    """The scale as it was asked for."""
    if product_mass_mg is not None:
        exact = product_mass_mg.quantize(Decimal("0.001"), rounding=ROUND_HALF_UP)
        is_whole = exact == exact.to_integral_value()
        return f"{mass_text(float(exact)) if is_whole else f'{exact.normalize():f} mg'} of product"
    assert acceptor_amount_mmol is not None, "a procedure has one scale"
    return f"{acceptor_amount_mmol.normalize():f} mmol of acceptor"
