"""Pure statistics on tables of measures: no simulation, no files."""
