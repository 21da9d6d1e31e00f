"""The stock over HTTP: thin views on selectors."""

from typing import Any

from django.db.models import QuerySet
from rest_framework.response import Response

from inventory import selectors
from inventory.api import schema, shapes
from inventory.models import Bottle, Movement, Place, Reservation, Substance
from labplan.base.errors import NotFound
from labplan.base.pagination import ByCodePagination
from labplan.base.views import ListView, LookView


@schema.substance_list
class SubstanceList(ListView):
    filters = {"name", "cas"}
    pagination = ByCodePagination

    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Substance]:
        return selectors.list_substances(actor=request.user, **wanted)

    def show(self, row: Substance) -> dict[str, Any]:
        return shapes.show_substance(row)


@schema.substance_detail
class SubstanceDetail(LookView):
    def get(self, request: Any, code: str) -> Response:
        found = selectors.list_substances(actor=request.user).filter(code=code).first()
        if found is None:
            raise NotFound(f"There is no substance {code}.")
        return Response(shapes.show_substance(found))


@schema.bottle_list
class BottleList(ListView):
    filters = {"substance", "place", "status"}
    choices = {"status": Bottle.Status.values}
    pagination = ByCodePagination

    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Bottle]:
        return selectors.list_bottles(actor=request.user, **wanted)

    def show(self, row: Bottle) -> dict[str, Any]:
        return shapes.show_bottle(row)


@schema.bottle_detail
class BottleDetail(LookView):
    def get(self, request: Any, code: str) -> Response:
        return Response(shapes.show_bottle(selectors.get_bottle(actor=request.user, code=code)))


@schema.movement_list
class MovementList(ListView):
    """The book of a bottle, newest line first; other projects' lines are for stock keepers."""

    def rows(
        self, request: Any, wanted: dict[str, str], code: str = "", **kwargs: Any
    ) -> QuerySet[Movement]:
        return selectors.movements_of(actor=request.user, bottle_code=code)

    def show(self, row: Movement) -> dict[str, Any]:
        return shapes.show_movement(row, row.bottle.measured_by)


@schema.place_list
class PlaceList(ListView):
    pagination = ByCodePagination

    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Place]:
        return selectors.list_places(actor=request.user)

    def show(self, row: Place) -> dict[str, Any]:
        return shapes.show_place(row)


@schema.reservation_list
class ReservationList(ListView):
    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Reservation]:
        return selectors.visible_reservations(actor=request.user)

    def show(self, row: Reservation) -> dict[str, Any]:
        return shapes.show_reservation(row)


@schema.reservation_detail
class ReservationDetail(LookView):
    def get(self, request: Any, code: Any) -> Response:
        found = selectors.visible_reservations(actor=request.user).filter(code=code).first()
        if found is None:
            raise NotFound(f"There is no reservation {code}.")
        return Response(shapes.show_reservation(found))
