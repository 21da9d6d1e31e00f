"""Cursor pages: an unchanging, unique order, so nothing is skipped or shown twice."""

import re
from typing import Any

from rest_framework.exceptions import NotFound
from rest_framework.pagination import Cursor, CursorPagination

from labplan.base.errors import FieldProblem, InvalidValue, MalformedRequest


class NewestFirstPagination(CursorPagination):
    """`page_size` from 1, cut to max_page_size; a cursor is taken only as it was given out."""

    ordering = "-id"
    position_form = re.compile(r"[0-9]{1,18}")
    page_size_query_param = "page_size"
    max_page_size = 200

    def get_page_size(self, request: Any) -> int:
        given = request.query_params.get(self.page_size_query_param, str(self.page_size))
        if not re.fullmatch(r"[0-9]{1,6}", given) or int(given) == 0:
            detail = f"Give page_size as a whole number from 1 to {self.max_page_size}."
            raise InvalidValue(detail, errors=(FieldProblem("page_size", "out_of_range", detail),))
        return min(int(given), self.max_page_size)

    def decode_cursor(self, request: Any) -> Cursor | None:
        given = request.query_params.get(self.cursor_query_param)
        if given is not None and not re.fullmatch(r"[A-Za-z0-9+/]+={0,2}", given):
            raise _broken_cursor()
        try:
            cursor = super().decode_cursor(request)
        except NotFound as error:
            raise _broken_cursor() from error
        if cursor is None or cursor.position is None:
            return cursor
        if not self.position_form.fullmatch(cursor.position):
            raise _broken_cursor()
        return cursor


class ByCodePagination(NewestFirstPagination):
    ordering = "code"
    position_form = re.compile(r"[^\x00]{1,120}")


class OldestFirstPagination(NewestFirstPagination):
    ordering = "id"


def _broken_cursor() -> MalformedRequest:
    return MalformedRequest(
        "This cursor is none of this list; start again without it and follow 'next'."
    )
