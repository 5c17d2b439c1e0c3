"""Declared questions: study files, their grid points, and running notebooks for them."""
