"""The stock: what there is, in which bottles, and the book that says how it came and went."""

from inventory.models.bottle import Bottle, Place, Reading
from inventory.models.ledger import Balance, Movement
from inventory.models.reservation import Hold, Reservation
from inventory.models.substance import Form, Substance

__all__ = [
    "Balance",
    "Bottle",
    "Form",
    "Hold",
    "Movement",
    "Place",
    "Reading",
    "Reservation",
    "Substance",
]
