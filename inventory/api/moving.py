"""What happens to bottles, over HTTP: receipt, facts, decanting, counts, readings, minimum."""

from functools import partial
from typing import Any

from django.db.models import QuerySet
from django.urls import reverse
from rest_framework.response import Response

from inventory import selectors, services
from inventory.api import bottle_orders, orders, post_schema, receipt_orders, schema, shapes
from inventory.api.filters import day_of, decimal_of, flag_of
from inventory.api.writing import write
from inventory.models import Bottle, Movement, Reading, Substance
from labplan.base.models import Project
from labplan.base.pagination import ByCodePagination
from labplan.base.preconditions import require_match
from labplan.base.rights import Actor, require
from labplan.base.views import ListView, LookView


@schema.bottle_list
@post_schema.bottle_receive
class BottleList(ListView):
    filters = {
        "substance", "place", "status", "expires_from", "expires_until", "water_ppm_above",
        "under_minimum", "parent",
    }  # fmt: skip
    choices = {"status": Bottle.Status.values, "under_minimum": ("true", "false")}
    pagination = ByCodePagination

    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Bottle]:
        asked = {
            **wanted,
            "expires_from": day_of(wanted, "expires_from"),
            "expires_until": day_of(wanted, "expires_until"),
            "water_ppm_above": decimal_of(wanted, "water_ppm_above"),
            "under_minimum": flag_of(wanted, "under_minimum"),
        }
        return selectors.list_bottles(actor=request.user, wanted=selectors.BottleFilter(**asked))

    def show(self, row: Bottle) -> dict[str, Any]:
        return shapes.show_bottle(row)

    def post(self, request: Any) -> Response:
        check = partial(require, request.user, "stock.receive")
        check()
        fields = receipt_orders.read_fields(request.data)
        return write(
            request, route="bottle.receive", check_rights=check,
            render=partial(_new_bottle, request.user),
            work=lambda claim: services.receive_bottle(
                actor=request.user, fields=fields,
                operation_id=services.operation_of(claim), once=claim,
            ),
        )  # fmt: skip


def _new_bottle(actor: Actor, code: str) -> Response:
    bottle = selectors.get_bottle(actor=actor, code=code)
    headers = {
        "Location": reverse("bottle-detail", args=[code]), "ETag": shapes.bottle_etag(bottle),
    }  # fmt: skip
    return Response(shapes.show_bottle(bottle), status=201, headers=headers)


@schema.movement_list
@post_schema.movement_write
class MovementList(ListView):
    """The book of a bottle, newest line first; other projects' lines are for stock keepers."""

    def rows(
        self, request: Any, wanted: dict[str, str], code: str = "", **kwargs: Any
    ) -> QuerySet[Movement]:
        return selectors.movements_of(actor=request.user, bottle_code=code)

    def show(self, row: Movement) -> dict[str, Any]:
        return shapes.show_movement(row, row.bottle.measured_by)

    def post(self, request: Any, code: str) -> Response:
        require(request.user, "stock.report")
        project_code, order = bottle_orders.read_movement(request.data)
        check = partial(_project_charged, request.user, project_code, order.kind)
        return write(
            request, route="bottle.move", check_rights=check,
            render=partial(_moved, request.user, 201),
            work=lambda claim: services.move_bottle(
                actor=request.user, bottle_code=code, order=order, project=check(),
                operation_id=services.operation_of(claim), once=claim,
            ),
        )  # fmt: skip


def _project_charged(actor: Actor, code: str, kind: str) -> Project | None:
    """The project that a movement is charged to. Raises as the service would."""
    operation = services.MOVEMENT_RIGHTS[kind]
    if code:
        charged = operation if operation == "stock.use" else "project.view"
        project = services.require_project(actor=actor, code=code, operation=charged)
    if operation != "stock.use":
        require(actor, operation)
    return project if code else None


def _moved(actor: Actor, status: int, moved: services.BottleMoved) -> Response:
    bottle = selectors.get_bottle(actor=actor, code=moved.bottle_code)
    body = {**shapes.show_bottle(bottle), "cancelled_holds": moved.cancelled_holds}
    return Response(body, status=status, headers={"ETag": shapes.bottle_etag(bottle)})


@post_schema.bottle_status
class BottleStatus(LookView):
    def post(self, request: Any, code: str) -> Response:
        require(request.user, "stock.report")
        values = bottle_orders.StatusSerializer(data=request.data).read()
        stops = values["status"] == "quarantined"
        return write(
            request, route="bottle.status", render=partial(_moved, request.user, 200),
            check_rights=partial(
                require, request.user, "stock.report" if stops else "stock.count"
            ),
            work=lambda claim: services.set_bottle_status(
                actor=request.user, bottle_code=code, status=values["status"],
                reason=values["reason"], once=claim,
                operation_id=services.operation_of(claim),
                check_version=lambda bottle: require_match(request, shapes.bottle_etag(bottle)),
            ),
        )  # fmt: skip


@post_schema.bottle_decant
class BottleDecant(LookView):
    def post(self, request: Any, code: str) -> Response:
        actor: Actor = request.user
        require(actor, "stock.report")
        project_code, order = bottle_orders.read_decant(request.data)
        check = partial(_project_charged, actor, project_code, "loss")
        return write(
            request, route="bottle.decant", check_rights=check,
            render=partial(_new_bottle, actor),
            work=lambda claim: services.decant(
                actor=actor, bottle_code=code, order=order, project=check(),
                operation_id=services.operation_of(claim), once=claim,
            ),
        )  # fmt: skip


@post_schema.reading_list
class ReadingList(ListView):
    def rows(
        self, request: Any, wanted: dict[str, str], code: str = "", **kwargs: Any
    ) -> QuerySet[Reading]:
        return selectors.readings_of(actor=request.user, bottle_code=code)

    def show(self, row: Reading) -> dict[str, Any]:
        return shapes.show_reading(row)

    def post(self, request: Any, code: str) -> Response:
        check = partial(require, request.user, "stock.report")
        check()
        order = bottle_orders.read_reading(request.data)
        return write(
            request, route="bottle.reading", check_rights=check, render=_reading,
            work=lambda claim: services.record_reading(
                actor=request.user, bottle_code=code, order=order, once=claim
            ),
        )  # fmt: skip


def _reading(reading: Reading) -> Response:
    return Response(shapes.show_reading(reading), status=201)


@post_schema.stock_count
class StockCount(LookView):
    def post(self, request: Any) -> Response:
        check = partial(require, request.user, "stock.count")
        check()
        body = bottle_orders.read_counts(request.data)
        return write(
            request, route="stock.count", check_rights=check, render=_counted,
            work=lambda claim: services.count_bottles(
                actor=request.user, operation_id=services.operation_of(claim), once=claim, **body
            ),
        )  # fmt: skip


def _counted(taken: services.CountsTaken) -> Response:
    return Response(shapes.show_counts(taken))


@post_schema.substance_minimum
class SubstanceMinimum(LookView):
    def post(self, request: Any, code: str) -> Response:
        check = partial(require, request.user, "stock.count")
        check()
        measured_by, amount = orders.read_minimum(request.data)
        return write(
            request, route="substance.minimum", check_rights=check, render=_substance,
            work=lambda claim: services.set_minimum(
                actor=request.user, substance_code=code, measured_by=measured_by, amount=amount,
                once=claim,
                check_version=lambda s: require_match(request, shapes.substance_etag(s)),
            ),
        )  # fmt: skip


def _substance(substance: Substance) -> Response:
    headers = {"ETag": shapes.substance_etag(substance)}
    return Response(shapes.show_substance(substance), headers=headers)
