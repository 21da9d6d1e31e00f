"""What the operator is told when a command of this app does nothing."""

from labplan.base.errors import DomainError


class OperationRefused(DomainError):
    """Nothing was changed; the text says what stands in the way and what to do."""

    code = "operation_refused"
    title = "The operation was refused"
    status = 409


class ProgramMissing(OperationRefused):
    code = "program_missing"
    title = "A program of PostgreSQL is missing"
