"""Compare a simulated mean with a known value, in standard errors over independent replicates."""

import numpy as np


def assert_within(values, expected, *, errors=4.0, largest_error=None):
    """Assert that the mean of independent replicates is within so many standard errors of a known value.

    At 4 standard errors a correct program fails with probability 6e-5 (2e-4 with 50 replicates); seeds are
    fixed, so that a pass stays a pass.
    """
    values = np.asarray(values, float)
    error = values.std(ddof=1) / np.sqrt(values.size)
    assert largest_error is None or error <= largest_error, f"standard error {error} is too large to tell"
    distance = abs(values.mean() - expected)
    assert distance <= errors * error, f"{values.mean()} ± {error}, expected {expected}"
