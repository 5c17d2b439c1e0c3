"""A report of a study: one self-contained page for a design review, the decision first, and a PDF of it."""
