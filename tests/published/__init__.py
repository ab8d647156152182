"""Published values, each reproduced exactly and confirmed by a route of its own."""
