"""The hazards as they stand on the sheet: what is known, what is not, what is said to be none."""

from typing import Any

from labplan.procedures.sheet.pictograms import PICTOGRAMS
from labplan.procedures.sheet.typography import heading_name, set_text

_COLUMNS = 3
_LINE = 20  # characters: half of the last line of a statement stays empty


def hazard_lines(hazards: list[dict[str, Any]]) -> dict[str, Any]:
    """Three lists and the P statements once each: their texts are long and mostly shared."""
    lines = [_line(hazard) for hazard in hazards]
    known = [line for line in lines if line["established"]]
    phrases = {
        statement["code"]: statement["text"].rstrip(".")
        for hazard in hazards
        for statement in hazard["precautionary_statements"]
    }
    return {
        "classified": [line for line in known if line["statements"]],
        "unknown": [line for line in lines if not line["established"]],
        "not_classified": [line for line in known if not line["statements"]],
        "phrases": _in_columns(phrases),
    }


def _in_columns(phrases: dict[str, str]) -> list[list[dict[str, Any]]]:
    """The statements in order, in three columns of about the same length of text."""
    lengths = {code: _LINE + len(code) + len(text) for code, text in phrases.items()}
    total = sum(lengths.values()) or 1
    columns: list[list[dict[str, Any]]] = [[] for _ in range(_COLUMNS)]
    before = 0
    for code in sorted(phrases):
        place = (before + lengths[code] // 2) * _COLUMNS // total
        columns[place].append({"code": code, "text": set_text(phrases[code])})
        before += lengths[code]
    return [column for column in columns if column]


def _line(hazard: dict[str, Any]) -> dict[str, Any]:
    return {
        "name": set_text(heading_name(hazard["name"])),
        "established": hazard["established"],
        "signal_word": hazard["signal_word"] or "No signal word",
        "pictograms": [
            {"code": code, "name": PICTOGRAMS[code].name} for code in hazard["pictograms"]
        ],
        "statements": [
            {"code": s["code"], "text": set_text(s["text"])} for s in hazard["hazard_statements"]
        ],
        "precautions": [s["code"] for s in hazard["precautionary_statements"]],
        "summary": set_text(_sentence(hazard["summary"])),
        "evidence": hazard["evidence"],
        "note": set_text(hazard["note"]),
    }


def _sentence(text: str) -> str:
    return text[:1].upper() + text[1:]
