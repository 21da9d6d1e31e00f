"""For those who run it: does the process live, can it work, what has it counted.

All of it is public and holds no data of the laboratory.
"""

from typing import Any

from django.http import HttpResponse, JsonResponse
from prometheus_client.exposition import choose_encoder

from labplan.base import metrics
from labplan.base.api.docs import OpenView
from labplan.operations.api import schema
from labplan.operations.gauges import DatabaseGauges
from labplan.operations.readiness import Finding, look_at_readiness

NEVER_STORED = {"Cache-Control": "no-store"}


@schema.health_live
class Live(OpenView):
    """Asks nobody else: a database that is away is no reason to kill this process."""

    def get(self, request: Any) -> JsonResponse:
        return JsonResponse({"status": "live"}, headers=NEVER_STORED)


@schema.health_ready
class Ready(OpenView):
    def get(self, request: Any) -> JsonResponse:
        found = look_at_readiness()
        body = {"status": found.status, "checks": [_show(each) for each in found.findings]}
        return JsonResponse(body, status=200 if found.is_ready else 503, headers=NEVER_STORED)


def _show(found: Finding) -> dict[str, Any]:
    return {
        "name": found.name,
        "ok": found.is_ok,
        "required": found.is_required,
        "detail": found.detail,
        "duration_ms": found.duration_ms,
    }


class Metrics(OpenView):
    """In the format of Prometheus; keep it inside, the proxy does not pass it on."""

    def get(self, request: Any) -> HttpResponse:
        encode, content_type = choose_encoder(request.META.get("HTTP_ACCEPT", ""))
        registry = metrics.registry_of_all()
        registry.register(DatabaseGauges())
        return HttpResponse(encode(registry), content_type=content_type, headers=NEVER_STORED)
