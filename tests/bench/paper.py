"""The sheet as PDF, each time of another procedure, beside as many pages of plain text by Typst."""

import hashlib
import statistics
import tempfile
import time
from collections.abc import Callable
from io import BytesIO
from pathlib import Path

import typst
from pypdf import PdfReader

from labplan.procedures.sheet.pdf import sheet_pdf
from tests.sheets import lactoside, octyl, view

ROUNDS = 15
_PLAIN = b"""#set document(title: "plain", date: none)
#set page(paper: "a4")
#set text(lang: "en")
#for page in range(int(sys.inputs.pages)) [
  #par(sys.inputs.mark) #for row in range(18) [A line of words of page #page as long as one
  of a sheet is in #sys.inputs.mark, number #row. ]
  #table(columns: 6, ..range(24 * 6).map(n => [#page #n])) #pagebreak(weak: true)
]
"""


def sheet_ms(stored: Callable[[], dict]) -> tuple[float, int]:  # type: ignore[type-arg]
    """Median of warm PDFs, and the number of pages."""
    times, pages = [], 0
    for number in range(ROUNDS):
        mark = hashlib.sha256(str(number).encode()).hexdigest()
        shown = view(stored(), code=f"P-{number:08d}", sha256=mark)
        started = time.perf_counter()
        pdf = sheet_pdf(shown)
        times.append((time.perf_counter() - started) * 1000)
        pages = len(PdfReader(BytesIO(pdf)).pages)
    return statistics.median(times[2:]), pages


def plain_ms(pages: int) -> float:
    """Median of as many warm pages of text with one table of 24 rows each, tagged alike."""
    times = []
    with tempfile.TemporaryDirectory(prefix="labplan-bench-") as folder:
        source = Path(folder, "plain.typ")
        source.write_bytes(_PLAIN)
        compiler = typst.Compiler(str(source), root=folder, ignore_system_fonts=True)
        for number in range(ROUNDS):
            inputs = {"pages": str(pages), "mark": f"document {number}"}
            started = time.perf_counter()
            compiler.compile(sys_inputs=inputs, format="pdf", pdf_standards=["ua-1"])
            times.append((time.perf_counter() - started) * 1000)
    return statistics.median(times[2:])


def rows() -> list[tuple[str, float, str, float]]:
    found = []
    for name, stored in (("three stages", lactoside), ("one stage", octyl)):
        took, pages = sheet_ms(stored)
        found.append(
            (f"PDF, {name}, {pages} pages", took, f"plain Typst, {pages} pages", plain_ms(pages))
        )
    return found
