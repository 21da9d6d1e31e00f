"""Why a structure cannot be taken as a target."""

from dataclasses import dataclass


@dataclass(frozen=True)
class TargetProblem(Exception):
    """A refusal of the structure itself: `code` for programs, `detail` says what to change."""

    code: str
    detail: str

    def __str__(self) -> str:
        return self.detail
