"""What a request for a procedure or for a preview has to say."""

from decimal import Decimal
from typing import Any

from rest_framework import serializers

from labplan.base.errors import FieldProblem, InvalidValue
from labplan.base.fields import QuantityField, StrictSerializer
from labplan.procedures.engine import DEFAULT_ACCEPTOR_MMOL, Scale, Wishes
from labplan.procedures.services import ProcedureOrder

ONE_SCALE = "Give exactly one of product_mass_g and acceptor_amount_mmol."


class PreviewSerializer(StrictSerializer):
    """A target and a scale. More digits than a microgram or a nanomole hold are refused."""

    target_smiles = serializers.CharField(
        max_length=4000, trim_whitespace=True,
        help_text="The glycoside wanted, as one isomeric SMILES without salt or solvent.",
    )  # fmt: skip
    product_mass_g = QuantityField(
        lowest="0.001", highest="1000", places=6, smallest="1 microgram", required=False,
        help_text="Mass of pure product wanted [g], at most 6 decimals.",
    )  # fmt: skip
    acceptor_amount_mmol = QuantityField(
        lowest="0.001", highest="10000", places=6, smallest="1 nanomole", required=False,
        help_text="Amount of acceptor to couple [mmol], at most 6 decimals.",
    )  # fmt: skip
    promoter = serializers.SlugField(
        max_length=80, required=False,
        help_text="Insist on this promoter, by substance code; left out, labplan chooses.",
    )  # fmt: skip
    solvent = serializers.SlugField(
        max_length=80, required=False,
        help_text="Insist on this solvent, by substance code; left out, labplan chooses.",
    )  # fmt: skip


class _ChargedSerializer(StrictSerializer):
    project = serializers.CharField(
        max_length=24, help_text="Code of the project that the material is charged to."
    )


class OrderSerializer(_ChargedSerializer, PreviewSerializer):
    """A target and a scale for a project."""


def read_order(data: Any) -> ProcedureOrder:
    """Check a request body; raise MalformedRequest, UnknownField or InvalidValue."""
    values = OrderSerializer(data=data).read()
    mass_g, mmol = _one_scale(values)
    return ProcedureOrder(
        project_code=values["project"],
        target_smiles=values["target_smiles"],
        product_mass_mg=mass_g * 1000 if mass_g is not None else None,
        acceptor_amount_mmol=mmol,
        promoter=values.get("promoter", ""),
        solvent=values.get("solvent", ""),
    )


def read_preview(data: Any) -> dict[str, Any]:
    """Check the body of a preview, where the scale may be left out; raise as read_order does."""
    values = PreviewSerializer(data=data).read()
    mass_g, mmol = _one_scale(values, otherwise=Decimal(DEFAULT_ACCEPTOR_MMOL))
    return {
        "smiles": values["target_smiles"],
        "scale": Scale(
            product_mass_mg=float(mass_g * 1000) if mass_g is not None else None,
            acceptor_amount_mmol=float(mmol) if mmol is not None else None,
        ),
        "wishes": Wishes(values.get("promoter"), values.get("solvent")),
    }


def _one_scale(
    values: dict[str, Any], *, otherwise: Decimal | None = None
) -> tuple[Decimal | None, Decimal | None]:
    """Grams of product or mmol of acceptor; both, or neither without a default, are refused."""
    mass_g, mmol = values.get("product_mass_g"), values.get("acceptor_amount_mmol")
    if mass_g is None and mmol is None:
        mmol = otherwise
    if (mass_g is None) == (mmol is None):
        raise InvalidValue(
            ONE_SCALE,
            errors=tuple(
                FieldProblem(name, "exactly_one_scale", ONE_SCALE)
                for name in ("product_mass_g", "acceptor_amount_mmol")
            ),
        )
    return mass_g, mmol
