"""Exact facts about a fleet, without simulation."""
