"""The newest seal as it stands on paper: `12-9F3A-61B2-C0D4-5E77`."""

import re

from labplan.base.seal_tables import Seal

SHORT_LENGTH = 16
_FORM = re.compile(r"\s*([1-9][0-9]{0,17})((?:-[0-9A-F]{4}){4})\s*")


def printed_value(number: int, digest: str) -> str:
    """Number and the first 64 bits of a seal."""
    short = digest[:SHORT_LENGTH].upper()
    groups = [short[start : start + 4] for start in range(0, SHORT_LENGTH, 4)]
    return "-".join([str(number), *groups])


def newest_printed() -> str:
    """The newest seal for a sheet or report; empty when nothing was sealed yet."""
    row = Seal.objects.order_by("-number").values_list("number", "digest").first()
    return printed_value(*row) if row else ""


def read_printed(text: str) -> tuple[int, str] | None:
    """(number, start of the digest) of a printed value; None when it is none."""
    found = _FORM.fullmatch(text.upper())
    if found is None:
        return None
    return int(found[1]), found[2].replace("-", "").lower()


def fault_of_printed(text: str) -> str:
    """What is wrong with a value that was printed once; empty when the chain holds it."""
    read = read_printed(text)
    if read is None:
        return f"{text!r} is no printed seal; it looks like 12-9F3A-61B2-C0D4-5E77"
    number, short = read
    digest = Seal.objects.filter(number=number).values_list("digest", flat=True).first()
    if digest is None:
        newest = Seal.objects.order_by("-number").values_list("number", flat=True).first()
        end = f"ends at seal {newest}" if newest else "is empty"
        return f"the paper names seal {text.strip()}, the chain {end}: it was cut"
    if digest[:SHORT_LENGTH] != short:
        return f"the paper names seal {text.strip()}, here it is {printed_value(number, digest)}"
    return ""
