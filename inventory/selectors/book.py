"""The book of a bottle, for those who keep it and those whose lines stand in it."""

from django.db.models import QuerySet

from inventory.models import Bottle, Movement
from labplan.base.errors import NotFound
from labplan.base.rights import Actor, may, require, visible_project_ids


def movements_of(*, actor: Actor, bottle_code: str) -> QuerySet[Movement]:
    """Lines of one bottle. Who may not keep the stock sees only the lines of his projects."""
    require(actor, "stock.view")
    bottle = Bottle.objects.filter(code=bottle_code).first()
    if bottle is None:
        raise NotFound(f"There is no bottle {bottle_code}.")
    lines = Movement.objects.filter(bottle=bottle).select_related("project", "bottle")
    if may(actor, "movement.view"):
        return lines
    mine = visible_project_ids(actor, "reservation.view")
    return lines if mine is None else lines.filter(project__in=mine)
