"""Compiled loops and the public functions around them."""
