"""The broker as every process speaks to it, with Django or without: its address, its channels."""

NUDGE_CHANNEL = "labplan:nudge"  # to the relay: there is something new
CHANGED_CHANNEL = "labplan:changed"  # to whoever waits: the code of the procedure that has changed


def client_address(address: str) -> str:
    """The address as the redis client reads it: Celery writes sockets as redis+socket://."""
    return address.replace("redis+socket://", "unix://", 1)
