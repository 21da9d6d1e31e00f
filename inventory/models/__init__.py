"""The stock: what there is, in which bottles, and the book that says how it came and went."""

from inventory.models.bottle import Bottle, Place, Reading
from inventory.models.ledger import Balance, Movement
from inventory.models.notice import Notice
from inventory.models.quota import Quota
from inventory.models.reservation import Hold, Reservation
from inventory.models.substance import Form, Substance

__all__ = [
    "Balance",
    "Bottle",
    "Form",
    "Hold",
    "Movement",
    "Notice",
    "Place",
    "Quota",
    "Reading",
    "Reservation",
    "Substance",
]
