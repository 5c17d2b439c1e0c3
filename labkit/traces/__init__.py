"""A log of what really arrived: read in pieces, turned into a fleet, and invented where there is none."""
