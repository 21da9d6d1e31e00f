"""What a request for a procedure has to say."""

from decimal import Decimal
from typing import Any

from rest_framework import serializers

from labplan.base.errors import FieldProblem, InvalidValue
from labplan.base.fields import QuantityField, StrictSerializer
from labplan.procedures.services import ProcedureOrder

ONE_SCALE = "Give exactly one of product_mass_g and acceptor_amount_mmol."


class OrderSerializer(StrictSerializer):
    """A target and a scale. More digits than a microgram or a nanomole hold are refused."""

    project = serializers.CharField(max_length=24)
    target_smiles = serializers.CharField(max_length=4000, trim_whitespace=True)
    product_mass_g = QuantityField(
        lowest="0.001", highest="1000", places=6, smallest="1 microgram", required=False
    )
    acceptor_amount_mmol = QuantityField(
        lowest="0.001", highest="10000", places=6, smallest="1 nanomole", required=False
    )


def read_order(data: Any) -> ProcedureOrder:
    """Check a request body; raise MalformedRequest, UnknownField or InvalidValue."""
    values = OrderSerializer(data=data).read()
    mass_g: Decimal | None = values.get("product_mass_g")
    mmol: Decimal | None = values.get("acceptor_amount_mmol")
    if (mass_g is None) == (mmol is None):
        raise InvalidValue(
            ONE_SCALE,
            errors=tuple(
                FieldProblem(name, "exactly_one_scale", ONE_SCALE)
                for name in ("product_mass_g", "acceptor_amount_mmol")
            ),
        )
    return ProcedureOrder(
        project_code=values["project"],
        target_smiles=values["target_smiles"],
        product_mass_mg=mass_g * 1000 if mass_g is not None else None,
        acceptor_amount_mmol=mmol,
    )
