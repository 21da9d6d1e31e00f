"""Why a structure cannot be taken as a target."""


class TargetProblem(Exception):
    """A refusal of the structure itself: `code` for programs, `detail` says what to change."""

    def __init__(self, code: str, detail: str) -> None:
        super().__init__(code, detail)
        self.code = code
        self.detail = detail

    def __str__(self) -> str:
        return self.detail
