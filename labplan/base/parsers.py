"""JSON as it was written: decimals stay decimals, no NaN, no key twice, no more than fits."""

import json
from decimal import Decimal, InvalidOperation
from typing import Any, NoReturn

from django.conf import settings
from rest_framework.parsers import BaseParser

from labplan.base.errors import BodyTooLarge, MalformedRequest


class StrictJSONParser(BaseParser):
    media_type = "application/json"

    def parse(self, stream: Any, media_type: str | None = None, context: Any = None) -> Any:
        # Django checks its limit only where it reads the body itself; here the stream is read.
        limit = settings.DATA_UPLOAD_MAX_MEMORY_SIZE
        body = stream.read(limit + 1)
        if len(body) > limit:
            raise BodyTooLarge(f"The body is over {limit} bytes; send only the named fields.")
        try:
            return json.loads(
                body.decode("utf-8"),
                parse_float=_decimal,
                parse_constant=_refuse_constant,
                object_pairs_hook=_object_without_repeats,
            )
        except (ValueError, RecursionError) as error:
            raise MalformedRequest(f"The body is not valid JSON in UTF-8: {error}.") from error


def _refuse_constant(name: str) -> NoReturn:
    raise ValueError(f"{name} is not a JSON number")


def _decimal(text: str) -> Decimal:
    try:
        return Decimal(text)
    except InvalidOperation as error:
        raise ValueError("a number has an exponent beyond all bounds") from error


def _object_without_repeats(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) != len(pairs):
        raise ValueError("a field is given twice")
    for name in found:
        name.encode()  # half of a surrogate pair is no text and cannot be answered in UTF-8
    return found
