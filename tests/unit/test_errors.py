"""Checks of single values: each message holds the value received and what is allowed."""

import numpy as np
import pytest

from branchlab import errors


@pytest.mark.parametrize("bad", [0, -1.0, float("nan"), float("inf"), "three", None, True])
def test_positive_refuses(bad):
    with pytest.raises(errors.InputError, match="width must be (positive|a number); got"):
        errors.check_positive("width", bad)


def test_whole_numbers_keep_every_digit():
    assert errors.check_integer("seed", 2**60 + 1, low=0) == 2**60 + 1
    assert errors.check_integer("seed", np.int64(2**60 + 1), low=0) == 2**60 + 1
    assert errors.check_integer("seed", 3.0, low=0) == 3
    with pytest.raises(errors.InputError, match="whole number of at least 0; got 2.5"):
        errors.check_integer("seed", 2.5, low=0)


def test_interval_is_printed():
    with pytest.raises(errors.InputError, match=r"angle must be in \(-1, 1\]; got -1"):
        errors.check_number("angle", -1, low=-1, high=1, open_low=True)


def test_choice_suggests_and_lists():
    with pytest.raises(errors.InputError, match="'periodic', 'absorbing'.*Did you mean 'periodic'"):
        errors.check_choice("sides", "perodic", ("periodic", "absorbing"))


def test_axis_names_the_place():
    with pytest.raises(errors.InputError, match=r"y\[2\] is nan"):
        errors.check_axis("y", [0.0, 1.0, np.nan])
    with pytest.raises(errors.InputError, match="one-dimensional; got shape"):
        errors.check_axis("y", [[0.0]])


def test_memory_is_refused_with_the_numbers():
    with pytest.raises(errors.ResourceError, match=r"GiB.*free.*Use fewer"):
        errors.check_memory(1e18, "the table", "Use fewer rays.")
    errors.check_memory(1e3, "the table", "Use fewer rays.")


def test_convergence_error_carries_the_best():
    assert errors.ConvergenceError("stalled", best=3).best == 3
