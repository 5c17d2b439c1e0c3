"""The stationary state: its forecast, starts drawn from it, and whether a run has reached it."""
