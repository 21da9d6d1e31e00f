"""What is known of the hazards of a substance, with its evidence; unknown is said as unknown."""

from dataclasses import dataclass
from functools import cache, lru_cache
from typing import Any

from labplan import datafiles

UNKNOWN_TEXT = "hazards not established: handle as hazardous"
NOT_CLASSIFIED_TEXT = "not classified as hazardous by the source named"


@dataclass(frozen=True)
class Statement:
    code: str
    text: str


@dataclass(frozen=True)
class Hazards:
    """The classification of one substance as printed. `established` False means unknown."""

    substance: str
    name: str
    established: bool
    signal_word: str | None
    pictograms: tuple[str, ...]
    hazard_statements: tuple[Statement, ...]
    precautionary_statements: tuple[Statement, ...]
    summary: str
    evidence: str
    source: str
    note: str
    row: dict[str, Any] | None


# (dissolved substance, solvent) -> the classification of the solution as it is sold
_SOLUTIONS = {("sodium-methoxide", "methanol"): "sodium-methoxide-25-in-methanol"}


def solution_key(substance: str, solvent: str) -> str | None:
    """The key of a solution that has a classification of its own, else None."""
    return _SOLUTIONS.get((substance, solvent))


@lru_cache(maxsize=2048)
def hazards_of(substance: str, name: str) -> Hazards:
    """Return the packaged classification of a substance key, or an unknown one."""
    row = next(
        (r for r in datafiles.table("classifications")["classifications"]
         if r["substance"] == substance),
        None,
    )  # fmt: skip
    if row is None or not row["established"]:
        return _unknown(substance, name, row)
    codes = [hazard["code"] for hazard in row["hazards"]] + list(row["supplemental"])
    return Hazards(
        substance=substance,
        name=name,
        established=True,
        signal_word=row["signal_word"],
        pictograms=tuple(row["pictograms"]),
        hazard_statements=tuple(
            Statement(code, statement_text(code).rstrip(".")) for code in codes
        ),
        precautionary_statements=tuple(
            Statement(code, statement_text(code)) for code in row["precautionary"]
        ),
        summary=row["signal_word"] or ("" if codes else NOT_CLASSIFIED_TEXT),
        evidence=row["evidence"],
        source=row["source"],
        note=row["note"] or "",
        row=row,
    )


_ROUTES = {
    "fatal": {"H300": "if swallowed", "H310": "in contact with skin", "H330": "if inhaled"},
    "toxic": {"H301": "if swallowed", "H311": "in contact with skin", "H331": "if inhaled"},
}


def acute_toxicity(substance: str) -> tuple[str, list[str], list[str]] | None:
    """The worst word that counts ("fatal", "toxic"), by which ways, and their codes; else None."""
    codes = {s.code for s in hazards_of(substance, substance).hazard_statements}
    for word, ways in _ROUTES.items():
        found = [code for code in ways if code in codes]
        if found:
            return word, [ways[code] for code in found], found
    return None


def _unknown(substance: str, name: str, row: dict[str, Any] | None) -> Hazards:
    return Hazards(
        substance=substance,
        name=name,
        established=False,
        signal_word=None,
        pictograms=(),
        hazard_statements=(),
        precautionary_statements=(),
        summary=UNKNOWN_TEXT,
        evidence="not known",
        source=row["source"] if row else "none",
        note=(row["note"] or "") if row else "",
        row=row,
    )


def statement_text(code: str) -> str:
    """The printed text of an H, EUH or P statement; KeyError for a code not in the table."""
    return _texts()[code]


@cache
def _texts() -> dict[str, str]:
    tables = datafiles.table("statements")
    return {
        row["code"]: row.get("print_text") or row["text"]
        for part in ("hazard", "precautionary", "eu_supplemental")
        for row in tables[part]
    }
