"""The choice graph to look around in: one server at a time, loads under two rules side by side."""
