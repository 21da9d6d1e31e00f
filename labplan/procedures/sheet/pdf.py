"""The sheet as PDF, by Typst in this process: tagged (PDF/UA-1) and the same bytes every time.

Everything reaches Typst as data, so no text of a user is ever read as markup. Only the fonts
inside Typst are used, and no date is written, so that two machines give the same bytes.
"""

import json
import threading
import unicodedata
from functools import cache
from pathlib import Path
from typing import Any

from labplan.procedures.sheet.pictograms import PICTOGRAMS
from labplan.procedures.sheet.typography import Rich

PAPERS = {"a4": "a4", "letter": "us-letter"}
_TEMPLATE = Path(__file__).with_name("sheet.typ")
# What the two fonts inside Typst can print. Anything else would stop the making of a PDF/UA, or
# Typst itself (line separators do): it is printed as a blank square, and the sheet says so.
_PRINTABLE = (
    (0x20, 0x7E), (0xA0, 0xAC), (0xAE, 0x17F), (0x18F, 0x1FF), (0x218, 0x21B), (0x384, 0x38A),
    (0x38C, 0x38C), (0x38E, 0x3A1), (0x3A3, 0x45F), (0x1E80, 0x1EFF), (0x2010, 0x2027),
    (0x2030, 0x2040), (0x2044, 0x2052), (0x2070, 0x2071), (0x2074, 0x208E), (0x20A0, 0x20BF),
    (0x2126, 0x214F), (0x2190, 0x22FF), (0x25A0, 0x25CF),
)  # fmt: skip
_BLANK = "□"
_one_at_a_time = threading.Lock()


def sheet_pdf(view: dict[str, Any], paper: str = "a4") -> bytes:
    """Set the sheet on one of PAPERS; KeyError for another."""
    size = PAPERS[paper]
    missing: set[str] = set()
    shown = _printable(view, missing)
    shown["has_missing_characters"] = bool(missing)
    inputs = {
        "sheet": json.dumps(shown, ensure_ascii=False),
        "pictograms": _pictograms(),
        "paper": size,
    }
    with _one_at_a_time:  # a compiler serves one thread at a time
        pdf = _compiler().compile(sys_inputs=inputs, format="pdf", pdf_standards=["ua-1"])
    assert isinstance(pdf, bytes)
    return pdf


@cache
def _compiler() -> Any:
    # Loaded with the first PDF: most web processes and all workers never make one.
    import typst

    return typst.Compiler(str(_TEMPLATE), root=str(_TEMPLATE.parent), ignore_system_fonts=True)


@cache
def _pictograms() -> str:
    return json.dumps({code: pictogram.svg for code, pictogram in PICTOGRAMS.items()})


def _printable(value: Any, missing: set[str]) -> Any:
    if isinstance(value, str):
        text = unicodedata.normalize("NFC", value)
        return "".join(c if _has_glyph(c) else _replaced(c, missing) for c in text)
    if isinstance(value, dict):
        return {key: item if key == "svg" else _printable(item, missing)
                for key, item in value.items()}  # fmt: skip
    if isinstance(value, Rich) and all(style == "" for style, _ in value):
        return _printable(value.plain, missing)  # most text is plain, and quicker so
    if isinstance(value, list | tuple):
        return [_printable(item, missing) for item in value]
    return value


def _replaced(character: str, missing: set[str]) -> str:
    if character.isspace():
        return " "
    missing.add(character)
    return _BLANK


@cache
def _has_glyph(character: str) -> bool:
    return any(first <= ord(character) <= last for first, last in _PRINTABLE)
