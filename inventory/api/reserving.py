"""Reservations, quotas and notices over HTTP."""

import uuid
from functools import partial
from typing import Any

from django.db.models import QuerySet
from django.urls import reverse
from rest_framework.response import Response

from inventory import selectors, services
from inventory.api import orders, post_schema, schema, shapes
from inventory.api.bodies import EmptySerializer
from inventory.api.filters import day_of, flag_of
from inventory.api.writing import write
from inventory.models import Notice, Quota, Reservation
from labplan.base.preconditions import is_known, require_match
from labplan.base.rights import require
from labplan.base.views import ListView, LookView


@schema.reservation_list
@post_schema.reservation_make
class ReservationList(ListView):
    filters = {
        "project", "state", "actor", "bottle", "substance", "expires_from", "expires_until",
    }  # fmt: skip
    choices = {"state": Reservation.State.values}

    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Reservation]:
        asked = {
            **wanted,
            "expires_from": day_of(wanted, "expires_from"),
            "expires_until": day_of(wanted, "expires_until"),
        }
        return selectors.visible_reservations(
            actor=request.user, wanted=selectors.ReservationFilter(**asked)
        )

    def show(self, row: Reservation) -> dict[str, Any]:
        return shapes.show_reservation(row)

    def post(self, request: Any) -> Response:
        project_code, order = orders.read_reservation(request.data)
        check = partial(
            services.require_project, actor=request.user, code=project_code,
            operation="reservation.make",
        )  # fmt: skip
        return write(
            request, route="reservation.make", check_rights=check, render=_made,
            work=lambda claim: services.reserve(
                actor=request.user, project=check(), order=order,
                operation_id=services.operation_of(claim), once=claim,
            ),
        )  # fmt: skip


def _made(made: services.Reserved) -> Response:
    location = reverse("reservation-detail", args=[made.reservation.code])
    headers = {"Location": location, "ETag": shapes.reservation_etag(made.reservation)}
    return Response(shapes.show_made(made), status=201, headers=headers)


@schema.reservation_detail
class ReservationDetail(LookView):
    def get(self, request: Any, code: uuid.UUID) -> Response:
        found = selectors.get_reservation(actor=request.user, code=code)
        headers = {"ETag": shapes.reservation_etag(found)}
        if is_known(request, headers["ETag"]):
            return Response(status=304, headers=headers)
        return Response(shapes.show_reservation(found), headers=headers)


@post_schema.reservation_use
class ReservationUse(LookView):
    """A fact: it needs no If-Match, whatever has become of the reservation meanwhile."""

    def post(self, request: Any, code: uuid.UUID) -> Response:
        check = partial(
            services.require_reservation, actor=request.user, code=code,
            operation="reservation.use",
        )  # fmt: skip
        check()
        body = orders.read_use(request.data)
        return write(
            request, route="reservation.use", check_rights=check, render=_used,
            work=lambda claim: services.use_reservation(
                actor=request.user, code=code, operation_id=services.operation_of(claim),
                once=claim, **body,
            ),
        )  # fmt: skip


def _used(used: services.Used) -> Response:
    headers = {"ETag": shapes.reservation_etag(used.reservation)}
    return Response(shapes.show_used(used), headers=headers)


def _shown(reservation: Reservation) -> Response:
    headers = {"ETag": shapes.reservation_etag(reservation)}
    return Response(shapes.show_reservation(reservation), headers=headers)


@post_schema.reservation_release
class ReservationRelease(LookView):
    def post(self, request: Any, code: uuid.UUID) -> Response:
        check = partial(
            services.require_reservation, actor=request.user, code=code,
            operation="reservation.release",
        )  # fmt: skip
        check()
        values = orders.ReleaseSerializer(data=request.data).read()
        return write(
            request, route="reservation.release", check_rights=check, render=_shown,
            work=lambda claim: services.give_back(
                actor=request.user, code=code, reason=values.get("reason", ""), once=claim,
                operation_id=services.operation_of(claim),
                check_version=lambda r: require_match(request, shapes.reservation_etag(r)),
            ),
        )  # fmt: skip


@post_schema.reservation_extend
class ReservationExtend(LookView):
    def post(self, request: Any, code: uuid.UUID) -> Response:
        check = partial(
            services.require_reservation, actor=request.user, code=code,
            operation="reservation.extend",
        )  # fmt: skip
        check()
        values = orders.ExtendSerializer(data=request.data).read()
        return write(
            request, route="reservation.extend", check_rights=check, render=_shown,
            work=lambda claim: services.extend_reservation(
                actor=request.user, code=code, expires_on=values["expires_on"], once=claim,
                check_version=lambda r: require_match(request, shapes.reservation_etag(r)),
            ),
        )  # fmt: skip


@post_schema.quota_list
class QuotaList(ListView):
    filters = {"project", "substance"}

    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Quota]:
        return selectors.visible_quotas(actor=request.user, **wanted)

    def show(self, row: Quota) -> dict[str, Any]:
        return shapes.show_quota(row)

    def post(self, request: Any) -> Response:
        require(request.user, "quota.set")
        project_code, order = orders.read_quota(request.data)
        check = partial(
            services.require_project, actor=request.user, code=project_code,
            operation="project.view",
        )  # fmt: skip
        return write(
            request, route="quota.set", check_rights=check, render=_quota_set,
            work=lambda claim: services.set_quota(
                actor=request.user, project=check(), order=order, once=claim
            ),
        )  # fmt: skip


def _quota_set(quota: Quota) -> Response:
    return Response(shapes.show_quota(quota))


@post_schema.notice_list
class NoticeList(ListView):
    filters = {"unread"}
    choices = {"unread": ("true", "false")}

    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Notice]:
        return selectors.own_notices(actor=request.user, unread=flag_of(wanted, "unread"))

    def show(self, row: Notice) -> dict[str, Any]:
        return shapes.show_notice(row)


@post_schema.notice_read
class NoticeRead(LookView):
    def post(self, request: Any, number: int) -> Response:
        check = partial(services.require_own_notice, actor=request.user, notice_id=number)
        check()
        EmptySerializer(data=request.data).read()
        return write(
            request, route="notice.read", check_rights=check, render=_read,
            work=lambda claim: services.mark_notice_read(
                actor=request.user, notice_id=number, once=claim
            ),
        )  # fmt: skip


def _read(notice: Notice) -> Response:
    return Response(shapes.show_notice(notice))
