"""Look at what could be made; nothing is stored or held."""

from typing import Any

from labplan.base.rights import Actor
from labplan.procedures.engine import Scale, Wishes, preview_on_shelf
from labplan.procedures.services.request import read_wanted_target


def preview_routes(*, actor: Actor, smiles: str, scale: Scale, wishes: Wishes) -> dict[str, Any]:
    """Every route to a target on the shelf as it is. Raises InvalidValue like a request does."""
    return preview_on_shelf(
        actor=actor, target=read_wanted_target(smiles), scale=scale, wishes=wishes
    )
