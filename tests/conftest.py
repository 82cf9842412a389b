"""What every test shares: numpy errors raise, one seeded generator, small canonical setups."""

import numpy as np
import pytest


@pytest.fixture(autouse=True)
def numpy_errors_raise():
    """Division by zero, overflow and invalid operations are failures, not numbers."""
    with np.errstate(divide="raise", over="raise", invalid="raise"):
        yield


@pytest.fixture
def rng():
    """A seeded generator."""
    return np.random.default_rng(20261201)
