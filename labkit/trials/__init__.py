"""A user's own rule, tried on tiny fleets before any study relies on it."""
