"""Seals over what never changes: the book of each bottle, the event log, the documents.

A seal covers runs of consecutive rows, carries the digest of the seal before, and is keyed with a
key outside the database. docs/decisions/0007 says what that covers and what not.
"""

from labplan.base.seal.printed import newest_printed
from labplan.base.seal.registry import Book, register_book
from labplan.base.seal.walking import SealFault, SealWalk
from labplan.base.seal.writing import SealKeyChanged, seal_new

__all__ = [
    "Book",
    "SealFault",
    "SealKeyChanged",
    "SealWalk",
    "newest_printed",
    "register_book",
    "seal_new",
]
