"""One function a figure: a table goes in, a matplotlib Figure comes out."""
