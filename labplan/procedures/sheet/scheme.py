"""The scheme as it stands on paper: drawings, plus signs, arrows, and what is under them."""

from typing import Any

from labplan.procedures.sheet.typography import heading_name, set_formula, set_text

TEXT_WIDTH_MM = 178.0
ARROW_MM, PLUS_MM = 19.0, 6.0
SMALLEST_COLUMN_MM = 30.0  # a name below needs this much
SMALLEST_SCALE = 0.55  # below it the letters of a drawing can no longer be read


def scheme(document: dict[str, Any]) -> list[list[dict[str, Any]]]:
    """Rows of structures and signs; one row where it can be read, else two."""
    parts = [_structure(drawing, document) for drawing in document.get("drawings", [])]
    if len(parts) < 2:
        return _scaled([parts]) if parts else []
    steps = {stage["kind"]: stage["number"] for stage in document["route"]["stages"]}
    donor, acceptor, glycoside, *target = parts
    first = [donor, {"kind": "plus", "width_mm": PLUS_MM}, acceptor]
    last = [_arrow("coupling", steps), glycoside]
    if target:
        last += [_arrow("deacetylation", steps), *target]
    one_row = [[*first, *last]]
    return _scaled(one_row if _scale(one_row) >= SMALLEST_SCALE else [first, last])


def _structure(drawing: dict[str, Any], document: dict[str, Any]) -> dict[str, Any]:
    key = drawing["key"]
    about = document["target"] if key == "target" else document["coupling"][key]
    name = set_text(heading_name(about["name"] or ""))
    return {
        "kind": "structure",
        "role": key,
        "svg": drawing["svg"],
        "drawn_mm": float(drawing["width_mm"]),
        "drawn_high_mm": float(drawing["height_mm"]),
        "name": name,
        "formula": set_formula(about["formula"]),
        "molar_mass": f"{about['molar_mass_g_per_mol']} g/mol",
        "alt": f"Structure of the {key}, {name.plain or about['formula']}: {about['smiles']}",
    }


def _arrow(kind: str, steps: dict[str, int]) -> dict[str, Any]:
    over = f"stage {steps[kind]}" if kind in steps else ""
    return {"kind": "arrow", "width_mm": ARROW_MM, "over": over, "under": kind}


def _scale(rows: list[list[dict[str, Any]]]) -> float:
    """The largest scale at which every row fits."""
    return min(1.0, *(_row_scale(row) for row in rows))


def _row_scale(row: list[dict[str, Any]]) -> float:
    signs = sum(part["width_mm"] for part in row if part["kind"] != "structure")
    drawn = sum(
        max(part["drawn_mm"], SMALLEST_COLUMN_MM) for part in row if part["kind"] == "structure"
    )
    return (TEXT_WIDTH_MM - signs) / drawn


def _scaled(rows: list[list[dict[str, Any]]]) -> list[list[dict[str, Any]]]:
    scale = _scale(rows)
    for part in (part for row in rows for part in row if part["kind"] == "structure"):
        part["drawn_mm"] = round(part["drawn_mm"] * scale, 2)
        part["drawn_high_mm"] = round(part["drawn_high_mm"] * scale, 2)
        part["width_mm"] = max(part["drawn_mm"], round(SMALLEST_COLUMN_MM * scale, 2))
    return rows
