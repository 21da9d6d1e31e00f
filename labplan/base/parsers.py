"""JSON as it was written: decimals stay decimals, no NaN, no key twice."""

import json
from decimal import Decimal
from typing import Any, NoReturn

from rest_framework.parsers import BaseParser

from labplan.base.errors import MalformedRequest


class StrictJSONParser(BaseParser):
    media_type = "application/json"

    def parse(self, stream: Any, media_type: str | None = None, context: Any = None) -> Any:
        try:
            text = stream.read().decode("utf-8")
            return json.loads(
                text,
                parse_float=Decimal,
                parse_constant=_refuse_constant,
                object_pairs_hook=_object_without_repeats,
            )
        except (UnicodeDecodeError, ValueError, RecursionError) as error:
            raise MalformedRequest(f"The body is not valid JSON in UTF-8: {error}.") from error


def _refuse_constant(name: str) -> NoReturn:
    raise ValueError(f"{name} is not a JSON number")


def _object_without_repeats(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) != len(pairs):
        raise ValueError("a field is given twice")
    return found
