"""CSV as it is meant: UTF-8, commas, decimal points, ISO dates. Anything else is refused."""

import csv
import io
import re
from collections.abc import Collection
from dataclasses import dataclass, field
from datetime import date
from decimal import Decimal
from pathlib import Path

from labplan.base.errors import FieldProblem, InvalidValue

# Python would also take 1_000, digits of other scripts, 20260615 and 2026-W25-1.
_NUMBER = re.compile(r"[+-]?[0-9]+(\.[0-9]+)?")
_DAY = re.compile(r"[0-9]{4}-[0-9]{2}-[0-9]{2}")


@dataclass
class RowErrors:
    """Collects what is wrong, so that one import reports all of it."""

    found: list[FieldProblem] = field(default_factory=list)

    def add(self, where: str, code: str, detail: str) -> None:
        self.found.append(FieldProblem(where, code, detail))

    def refuse(self) -> None:
        """Raise InvalidValue when anything was found: for a row that came over the API."""
        if self.found:
            raise InvalidValue("Correct the fields listed in errors.", errors=tuple(self.found))


@dataclass
class Row:
    """One line of a file; the readers note an error and return None instead of raising.

    `number` is None for a row that stands in no file: then an error names the column alone.
    """

    number: int | None
    values: dict[str, str]
    errors: RowErrors

    def error(self, column: str, code: str, detail: str) -> None:
        where = column if self.number is None else f"row {self.number}, {column}"
        self.errors.add(where, code, detail)

    def need(self, columns: Collection[str]) -> None:
        for column in sorted(columns):
            if not self.text(column):
                self.error(column, "missing", "A value is needed here.")

    def text(self, column: str) -> str:
        return self.values.get(column, "")

    def within(self, column: str, longest: int) -> str:
        """The text, with an error when the column of the database does not hold it."""
        if len(self.text(column)) > longest:
            self.error(column, "too_long", f"At most {longest} characters.")
        return self.text(column)

    def choice(self, column: str, allowed: tuple[str, ...]) -> str:
        value = self.text(column)
        if value not in allowed:
            options = ", ".join(option for option in allowed if option)
            self.error(column, "not_a_choice", f"{value!r} is not one of: {options}.")
        return value

    def decimal(
        self, column: str, *, lowest: str = "-1e9", highest: str = "1e9", places: int = 4
    ) -> Decimal | None:
        """A finite number within bounds; more decimals than are kept is an error."""
        text = self.text(column)
        if not text:
            return None
        if "," in text:
            self.error(column, "decimal_comma", "Write numbers with a decimal point.")
            return None
        if not _NUMBER.fullmatch(text):
            self.error(column, "not_a_number", f"{text!r} is not a number such as 12.5.")
            return None
        value = Decimal(text)
        if not Decimal(lowest) <= value <= Decimal(highest):
            self.error(column, "out_of_range", f"Give a value from {lowest} to {highest}.")
            return None
        if -int(value.as_tuple().exponent) > places:
            self.error(column, "too_many_digits", f"At most {places} decimals are kept.")
            return None
        return value

    def day(self, column: str) -> date | None:
        text = self.text(column)
        if not text:
            return None
        try:
            return date.fromisoformat(text if _DAY.fullmatch(text) else "")
        except ValueError:
            self.error(column, "not_a_date", f"Write dates as YYYY-MM-DD, not {text!r}.")
            return None


def read_rows(
    path: Path, columns: tuple[str, ...], *, required: Collection[str], errors: RowErrors
) -> list[Row]:
    """Read a file with a header line; unknown columns and missing values are errors."""
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as error:
        errors.add(path.name, "not_utf8", f"Save the file as UTF-8: {error}.")
        return []
    except OSError as error:
        errors.add(path.name, "unreadable", f"The file cannot be read: {error.strerror}.")
        return []
    if "\0" in text:
        errors.add(path.name, "not_csv", "The file holds a NUL character; save it as CSV again.")
        return []
    try:
        table = list(csv.reader(io.StringIO(text), strict=True))
    except csv.Error as error:
        errors.add(path.name, "not_csv", f"The file is not CSV with commas: {error}.")
        return []
    if not table:
        errors.add(path.name, "empty", "The file is empty; the first line names the columns.")
        return []
    header = [name.strip() for name in table[0]]
    if not _header_is_sound(path.name, header, columns, required, errors):
        return []
    return _rows(table[1:], header, required, errors)


def _header_is_sound(
    name: str,
    header: list[str],
    columns: tuple[str, ...],
    required: Collection[str],
    errors: RowErrors,
) -> bool:
    before = len(errors.found)  # another file's errors are no fault of this header
    if len(header) == 1 and ";" in header[0]:
        errors.add(name, "semicolons", "Separate the columns by commas, not semicolons.")
        return False
    for column in sorted(set(header) - set(columns)):
        errors.add(
            name, "unknown_column", f"{column!r} is not a column; known: {', '.join(columns)}."
        )
    for column in sorted(set(required) - set(header)):
        errors.add(name, "missing_column", f"The column {column!r} is needed.")
    if len(set(header)) != len(header):
        errors.add(name, "repeated_column", "A column is named twice.")
    return len(errors.found) == before


def _rows(
    lines: list[list[str]], header: list[str], required: Collection[str], errors: RowErrors
) -> list[Row]:
    rows = []
    for number, line in enumerate(lines, start=2):
        if not any(cell.strip() for cell in line):
            continue
        if len(line) != len(header):
            errors.add(
                f"row {number}", "wrong_width", f"{len(line)} cells, but {len(header)} columns."
            )
            continue
        values = {column: cell.strip() for column, cell in zip(header, line, strict=True)}
        row = Row(number, values, errors)
        row.need(required)
        rows.append(row)
    return rows
