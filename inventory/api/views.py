"""The stock over HTTP: thin views on selectors."""

from typing import Any

from django.db.models import QuerySet
from rest_framework.response import Response

from inventory import selectors
from inventory.api import schema, shapes
from inventory.api.filters import flag_of
from inventory.models import Place, Substance
from labplan.base.pagination import ByCodePagination
from labplan.base.preconditions import is_known
from labplan.base.views import ListView, LookView


@schema.substance_list
class SubstanceList(ListView):
    filters = {"name", "cas", "under_minimum"}
    choices = {"under_minimum": ("true", "false")}
    pagination = ByCodePagination

    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Substance]:
        asked = {**wanted, "under_minimum": flag_of(wanted, "under_minimum")}
        return selectors.list_substances(actor=request.user, **asked)

    def show(self, row: Substance) -> dict[str, Any]:
        return shapes.show_substance(row)


@schema.substance_detail
class SubstanceDetail(LookView):
    def get(self, request: Any, code: str) -> Response:
        found = selectors.get_substance(actor=request.user, code=code)
        headers = {"ETag": shapes.substance_etag(found)}
        if is_known(request, headers["ETag"]):
            return Response(status=304, headers=headers)
        return Response(shapes.show_substance(found), headers=headers)


@schema.bottle_detail
class BottleDetail(LookView):
    def get(self, request: Any, code: str) -> Response:
        found = selectors.get_bottle(actor=request.user, code=code)
        headers = {"ETag": shapes.bottle_etag(found)}
        if is_known(request, headers["ETag"]):
            return Response(status=304, headers=headers)
        return Response(shapes.show_bottle(found), headers=headers)


@schema.place_list
class PlaceList(ListView):
    pagination = ByCodePagination

    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Place]:
        return selectors.list_places(actor=request.user)

    def show(self, row: Place) -> dict[str, Any]:
        return shapes.show_place(row)
