"""What may be done with the stock. Other apps call these and never its models."""

from inventory.services.holds import (
    HoldLine,
    hold_lines,
    keep_still,
    lapse_reservation,
    release_reservation,
)
from inventory.services.importing import import_stock
from inventory.services.receipt import BottleReceipt, receive_bottles

__all__ = [
    "BottleReceipt",
    "HoldLine",
    "hold_lines",
    "import_stock",
    "keep_still",
    "lapse_reservation",
    "receive_bottles",
    "release_reservation",
]
