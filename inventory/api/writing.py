"""POST, the same way everywhere: the right first, then the body, then the key, then the work."""

from collections.abc import Callable
from typing import Any, TypeVar

from rest_framework.response import Response

from labplan.base.idempotency import Claim, answer_once, claim_from

Result = TypeVar("Result")


def write(
    request: Any, *, route: str, check_rights: Callable[[], Any],
    work: Callable[[Claim[Result]], Result], render: Callable[[Result], Response],
) -> Response:  # fmt: skip
    """Answer a request that moves or makes something, once for each Idempotency-Key."""
    claim: Claim[Result] = claim_from(request, route=route, render=render)
    return answer_once(claim, check_rights=check_rights, work=lambda: work(claim))
