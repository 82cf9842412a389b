"""What can go wrong, in words: error classes and the checks that raise them.

Every message says what was wrong, the value received, what is allowed (and how the limit was computed)
and what to do.
"""

import difflib
import math
import numbers
import os
import pathlib
from collections.abc import Iterable

import numpy as np


class BranchlabError(Exception):
    """Base of every error that branchlab raises on purpose."""


class InputError(BranchlabError, ValueError):
    """A value that the user gave cannot be used."""


class RangeError(InputError):
    """The request is outside the range in which the method is valid."""


class ResourceError(BranchlabError, MemoryError):
    """The computation does not fit into the memory of this machine."""


class ConvergenceError(BranchlabError, RuntimeError):
    """An iteration stopped before its tolerance; ``best`` carries the best estimate."""

    def __init__(self, message: str, best=None):
        super().__init__(message)
        self.best = best


class BranchlabWarning(UserWarning):
    """The answer is given, with a doubt that the text names."""


def suggestion(name: str, allowed: Iterable[str]) -> str:
    """Return " Did you mean 'x'?" for a near miss, else an empty string."""
    near = difflib.get_close_matches(str(name), [str(a) for a in allowed], n=1)
    return f" Did you mean {near[0]!r}?" if near else ""


def check_choice(name: str, value, allowed: Iterable[str]) -> str:
    """Return `value` if it is one of `allowed`, else raise `InputError` that lists them."""
    allowed = list(allowed)
    if value not in allowed:
        raise InputError(
            f"{name} {value!r} is not known; allowed: {', '.join(map(repr, allowed))}.{suggestion(value, allowed)}"
        )
    return value


def check_number(name: str, value, *, low=-math.inf, high=math.inf, open_low=False, open_high=False) -> float:
    """Return `value` as a finite float inside the stated interval, else raise `InputError`."""
    try:
        number = float(value)
    except (TypeError, ValueError):
        raise InputError(f"{name} must be a number; got {value!r}.") from None
    if isinstance(value, bool):
        raise InputError(f"{name} must be a number; got {value!r}.")
    above = number > low if open_low else number >= low
    below = number < high if open_high else number <= high
    if not (math.isfinite(number) and above and below):
        left, right = "(" if open_low else "[", ")" if open_high else "]"
        if low == 0 and high == math.inf:
            wanted = "positive" if open_low else "zero or positive"
        elif low == -math.inf and high == math.inf:
            wanted = "finite"
        else:
            wanted = f"in {left}{low:g}, {high:g}{right}"
        raise InputError(f"{name} must be {wanted}; got {value!r}.")
    return number


def check_positive(name: str, value) -> float:
    """Return `value` as a finite float above zero, else raise `InputError`."""
    return check_number(name, value, low=0.0, open_low=True)


def check_integer(name: str, value, *, low: int) -> int:
    """Return `value` as an int of at least `low`, else raise `InputError`."""
    number = check_number(name, value)
    whole = int(value) if isinstance(value, numbers.Integral) else int(number)  # a float holds whole numbers to 2**53
    if number != int(number) or whole < low:
        raise InputError(f"{name} must be a whole number of at least {low}; got {value!r}.")
    return whole


def check_axis(name: str, values, *, minimum: int = 1) -> np.ndarray:
    """Return a finite, one-dimensional float64 array, else raise `InputError` with the place."""
    try:
        axis = np.asarray(values, dtype=np.float64)
    except (TypeError, ValueError):
        raise InputError(f"{name} must be numbers; got {type(values).__name__}.") from None
    if axis.ndim != 1:
        raise InputError(f"{name} must be one-dimensional; got shape {axis.shape}.")
    if axis.size < minimum:
        raise InputError(f"{name} needs at least {minimum} values; got {axis.size}.")
    if not np.isfinite(axis).all():
        at = int(np.flatnonzero(~np.isfinite(axis))[0])
        raise InputError(f"{name} must be finite; {name}[{at}] is {axis[at]}.")
    return axis


def available_memory() -> int:
    """Return the bytes of memory that can still be taken on this machine."""
    try:
        for line in pathlib.Path("/proc/meminfo").read_text(encoding="ascii").splitlines():
            if line.startswith("MemAvailable:"):
                return int(line.split()[1]) * 1024
    except OSError:
        pass
    try:
        return os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES")
    except (AttributeError, ValueError, OSError):  # a system that does not tell: nothing is refused
        return 2**63


def check_memory(needed: float, what: str, advice: str) -> None:
    """Raise `ResourceError` if `needed` bytes exceed 80 % of the memory that is free."""
    free = available_memory()
    if needed > 0.8 * free:
        raise ResourceError(
            f"{what} needs about {needed / 2**30:.2g} GiB; {free / 2**30:.2g} GiB are free on this machine and "
            f"80 % of that may be taken. {advice}"
        )
