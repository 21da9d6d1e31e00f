"""Cursor pages: an unchanging, unique order, so nothing is skipped or shown twice."""

from rest_framework.pagination import CursorPagination


class NewestFirstPagination(CursorPagination):
    ordering = "-id"
    page_size_query_param = "page_size"
    max_page_size = 200


class ByCodePagination(NewestFirstPagination):
    ordering = "code"


class OldestFirstPagination(NewestFirstPagination):
    ordering = "id"
