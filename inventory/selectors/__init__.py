"""What may be asked of the stock. Every selector starts from what the actor may see."""

from inventory.selectors.book import movements_of
from inventory.selectors.reservations import held_lines, overdue_codes, visible_reservations
from inventory.selectors.shelf import BottleOnShelf, shelf_snapshot
from inventory.selectors.stock import get_bottle, list_bottles, list_places, list_substances

__all__ = [
    "BottleOnShelf",
    "get_bottle",
    "held_lines",
    "list_bottles",
    "list_places",
    "list_substances",
    "movements_of",
    "overdue_codes",
    "shelf_snapshot",
    "visible_reservations",
]
