"""Replicates shared among threads here or the workers of a cluster; results are the same to the bit."""
