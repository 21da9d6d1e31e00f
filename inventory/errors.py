"""What the stock refuses."""

from dataclasses import asdict, dataclass
from typing import Any

from labplan.base.errors import DomainError, FieldProblem, InvalidValue


@dataclass(frozen=True)
class Shortfall:
    """One line that cannot be met; amounts in the base unit of the bottle."""

    line: int
    bottle: str
    needed: int
    usable: int

    def as_dict(self) -> dict[str, Any]:
        return asdict(self)


class StockShort(DomainError):
    """One or more bottles hold less than was asked; every short line is listed."""

    code = "stock_short"
    title = "The stock does not hold enough"
    status = 409

    def __init__(
        self, detail: str, *, shortfalls: tuple[Shortfall, ...] = (),
        errors: tuple[FieldProblem, ...] = (),
    ) -> None:  # fmt: skip
        super().__init__(detail, errors=errors)
        self.shortfalls = shortfalls

    def __reduce__(self) -> tuple[Any, ...]:
        return (_rebuild_stock_short, (self.detail, self.shortfalls, self.errors))


def _rebuild_stock_short(
    detail: str, shortfalls: tuple[Shortfall, ...], errors: tuple[FieldProblem, ...]
) -> StockShort:
    return StockShort(detail, shortfalls=shortfalls, errors=errors)


class QuotaExceeded(DomainError):
    """The project may not claim so much of a substance in this period; says what is left."""

    code = "quota_exceeded"
    title = "The project's quota does not allow this"
    status = 422


class NotConvertible(InvalidValue):
    """The bottle is measured otherwise, and nothing says how dense its content is."""

    code = "not_convertible"
    title = "The amount cannot be converted"


class ImportRefused(DomainError):
    """A file with errors changes nothing; every error is listed with its row and column."""

    code = "import_refused"
    title = "The file was not imported"
    status = 422
