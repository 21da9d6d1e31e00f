"""From a coupling to a sized, written route: pure functions on values."""
