"""What may be done with the stock. Other apps call these and never its models."""

from inventory.services.bottles import (
    OPERATIONS as MOVEMENT_RIGHTS,
)
from inventory.services.bottles import (
    BottleMoved,
    MovementOrder,
    ReadingOrder,
    move_bottle,
    record_reading,
    set_bottle_status,
)
from inventory.services.counting import Count, CountsTaken, count_bottles, count_from_file
from inventory.services.decanting import DecantOrder, Preparation, decant
from inventory.services.holds import (
    HoldLine,
    hold_lines,
    keep_still,
    lapse_reservation,
    release_reservation,
)
from inventory.services.importing import import_stock
from inventory.services.keeping import (
    extend_reservation,
    give_back,
    make_firm,
    require_reservation,
)
from inventory.services.minimum import set_minimum
from inventory.services.notices import HOLDS_CANCELLED_TOPIC, mark_notice_read, require_own_notice
from inventory.services.once import operation_of, write_once
from inventory.services.picking import Wanted
from inventory.services.projects import require_project
from inventory.services.quotas import QuotaOrder, set_quota
from inventory.services.receipt import BottleReceipt, receive_bottles
from inventory.services.receiving import receive_bottle
from inventory.services.reservations import (
    ReservationLine,
    ReservationOrder,
    Reserved,
    reserve,
)
from inventory.services.using import Actual, Used, use_reservation

__all__ = [
    "HOLDS_CANCELLED_TOPIC",
    "MOVEMENT_RIGHTS",
    "Actual",
    "BottleMoved",
    "BottleReceipt",
    "Count",
    "CountsTaken",
    "DecantOrder",
    "HoldLine",
    "MovementOrder",
    "Preparation",
    "QuotaOrder",
    "ReadingOrder",
    "ReservationLine",
    "ReservationOrder",
    "Reserved",
    "Used",
    "Wanted",
    "count_bottles",
    "count_from_file",
    "decant",
    "extend_reservation",
    "give_back",
    "hold_lines",
    "import_stock",
    "keep_still",
    "lapse_reservation",
    "make_firm",
    "mark_notice_read",
    "move_bottle",
    "operation_of",
    "receive_bottle",
    "receive_bottles",
    "record_reading",
    "release_reservation",
    "require_own_notice",
    "require_project",
    "require_reservation",
    "reserve",
    "set_bottle_status",
    "set_minimum",
    "set_quota",
    "use_reservation",
    "write_once",
]
