"""What may be asked of the stock. Every selector starts from what the actor may see."""

from inventory.selectors.book import movements_of
from inventory.selectors.reservations import (
    ReservationFilter,
    get_reservation,
    held_lines,
    overdue_codes,
    own_notices,
    visible_quotas,
    visible_reservations,
)
from inventory.selectors.shelf import BottleOnShelf, shelf_snapshot
from inventory.selectors.stock import (
    BottleFilter,
    get_bottle,
    get_substance,
    list_bottles,
    list_places,
    list_substances,
    readings_of,
)

__all__ = [
    "BottleFilter",
    "BottleOnShelf",
    "ReservationFilter",
    "get_bottle",
    "get_reservation",
    "get_substance",
    "held_lines",
    "list_bottles",
    "list_places",
    "list_substances",
    "movements_of",
    "overdue_codes",
    "own_notices",
    "readings_of",
    "shelf_snapshot",
    "visible_quotas",
    "visible_reservations",
]
