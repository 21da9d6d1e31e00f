"""The web service of a test in a process of its own: the clock stands where the tests' stands."""

from labplan.base import clock
from labplan.wsgi import application
from tests.conftest import NOON

clock._read = clock.standing_at(NOON)

__all__ = ["application"]
