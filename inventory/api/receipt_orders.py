"""What the body about a new bottle has to say: a line of the stock file as JSON.

What a value may be is ruled by inventory/services/stock_row.py alone; here it becomes the text
that would stand in the file.
"""

from collections.abc import Sequence
from decimal import Decimal
from typing import Any

from rest_framework import serializers

from inventory.models import Bottle, Form, Substance
from inventory.services.stock_row import STOCK_COLUMNS, STOCK_NEEDED, UNITS
from labplan.base.fields import StrictSerializer

_LONGEST = 4000
_MOST_DIGITS = 40
_TEXT: dict[str, Any] = {"type": "string"}
_DAY = {"type": "string", "format": "date", "examples": ["2026-12-01"]}
_NUMBER = {
    "anyOf": [{"type": "number"}, {"type": "string", "pattern": r"^([+-]?[0-9]+(\.[0-9]+)?)?$"}]
}


def _word(allowed: Sequence[str]) -> dict[str, Any]:
    return {"type": "string", "enum": list(allowed)}


# column -> (its schema, what it says)
_CELLS: dict[str, tuple[dict[str, Any], str]] = {
    "code": (_TEXT, "Code of the bottle: 1 to 24 letters, digits, dots, dashes, underscores."),
    "substance": (_TEXT, "Name of the substance; looked up with cas and smiles."),
    "cas": (_TEXT, "CAS registry number; its check digit is tested."),
    "smiles": (_TEXT, "Isomeric SMILES; needed for a compound that is not known."),
    "kind": (_word(Substance.Kind.values), "material or mixture: it has no structure."),
    "form": (_word(Form.Kind.values), "How it comes; left out, neat."),
    "hydrate_water": (_NUMBER, "Of a hydrate: moles of water a mole."),
    "solution_basis": (_word(Form.SolutionBasis.values), "Of a solution: strength in."),
    "solution_value": (_NUMBER, "Of a solution: its strength."),
    "solution_solvent": (_TEXT, "Of a solution: name of what it is in."),
    "solution_temperature_c": (_NUMBER, "Of a solution: the strength holds at [°C]."),
    "active_share_pct": (_NUMBER, "Of a mix of anomers: the share that reacts [%]."),
    "amount": (_NUMBER, "What is in the bottle, in the unit."),
    "unit": (_word(tuple(UNITS)), "Settles for good whether it is weighed, measured or counted."),
    "assay_pct": (_NUMBER, "The figure on the label [%]."),
    "assay_of": (_TEXT, "as_is, hydrate, anhydrous, or the formula the label counts, as BF3."),
    "assay_kind": (_word(Bottle.AssayKind.values), "How the assay was found."),
    "density_g_per_ml": (_NUMBER, "Density on the label [g/mL]."),
    "density_temperature_c": (_NUMBER, "Temperature of that density [°C]."),
    "water_ppm": (_NUMBER, "A water reading, by mass [ppm]."),
    "water_read_on": (_DAY, "The day of the water reading."),
    "activated_on": (_DAY, "Of sieves: the day of the last activation."),
    "stabiliser": (_TEXT, "Name of the stabiliser, none or unknown."),
    "stabiliser_amount_pct": (_NUMBER, "How much of it [%]."),
    "stabiliser_basis": (_word(("w/w", "v/v")), "What that is a share of."),
    "lot": (_TEXT, "Lot on the label."),
    "supplier": (_TEXT, "Where it came from."),
    "place": (_TEXT, "Code of the place it stands at."),
    "received_on": (_DAY, "The day it came; never in the future."),
    "opened_on": (_DAY, "The day it was opened."),
    "expires_on": (_DAY, "Good to the end of this day."),
    "status": (_word(Bottle.Status.values), "Whether it may be used; left out, usable."),
    "note": (_TEXT, "Anything to be said about it."),
}  # fmt: skip


class CellField(serializers.Field):
    """One cell as it would stand in the file: a JSON number is written out, no digit changed."""

    default_error_messages = {"too_long": "Give a number of at most {most} digits."}

    def __init__(self, *, schema: dict[str, Any], **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self.schema = schema
        self._text = serializers.CharField(allow_blank=True, max_length=_LONGEST)

    def to_internal_value(self, data: Any) -> str:
        if isinstance(data, Decimal):
            if len(str(data)) > _MOST_DIGITS or abs(data.adjusted()) > _MOST_DIGITS:
                self.fail("too_long", most=_MOST_DIGITS)
            data = f"{data:f}"
        return str(self._text.run_validation(data))


class ReceiptSerializer(StrictSerializer):
    """A bottle that came, by the columns of the stock file."""

    def get_fields(self) -> dict[str, serializers.Field]:
        return {
            name: CellField(schema=schema, help_text=what, required=name in STOCK_NEEDED)
            for name, (schema, what) in ((name, _CELLS[name]) for name in STOCK_COLUMNS)
        }


def read_fields(data: Any) -> dict[str, str]:
    """The cells that are given; raise MalformedRequest, UnknownField or InvalidValue."""
    return ReceiptSerializer(data=data).read()
