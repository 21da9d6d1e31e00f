"""A list and a single look, the same way everywhere."""

from abc import abstractmethod
from collections.abc import Sequence
from typing import Any, ClassVar

from django.db.models import QuerySet
from rest_framework.response import Response
from rest_framework.views import APIView

from labplan.base.fields import require_known_parameters, require_known_values
from labplan.base.pagination import NewestFirstPagination

PAGE_PARAMETERS = {"cursor", "page_size"}


class LookView(APIView):
    """A view that refuses query parameters it does not read."""

    parameters: ClassVar[set[str]] = set()

    def initial(self, request: Any, *args: Any, **kwargs: Any) -> None:
        super().initial(request, *args, **kwargs)
        require_known_parameters(request, self.parameters_of(request))

    def parameters_of(self, request: Any) -> set[str]:
        return self.parameters


class ListView(LookView):
    """GET a page of rows. Subclasses name the filters and give the rows and their form."""

    filters: ClassVar[set[str]] = set()
    # filter -> the only values it takes
    choices: ClassVar[dict[str, Sequence[str]]] = {}
    pagination: ClassVar[type[NewestFirstPagination]] = NewestFirstPagination

    def get(self, request: Any, **kwargs: Any) -> Response:
        wanted = {
            name: request.query_params[name]
            for name in self.filters
            if name in request.query_params
        }
        require_known_values(wanted, self.choices)
        paginator = self.pagination()
        page = paginator.paginate_queryset(self.rows(request, wanted, **kwargs), request, self)
        return paginator.get_paginated_response([self.show(row) for row in page or []])

    def parameters_of(self, request: Any) -> set[str]:
        return self.filters | PAGE_PARAMETERS if request.method == "GET" else set()

    @abstractmethod
    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[Any]:
        """The rows the actor may see, filtered by what `wanted` names."""

    @abstractmethod
    def show(self, row: Any) -> dict[str, Any]:
        """One row as JSON."""
