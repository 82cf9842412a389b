"""Random numbers as pure functions of a seed and two whole numbers: no order of drawing, no state."""

import numpy as np

from branchlab.errors import InputError, check_integer

SEEDS = 2**63


def check_seed(seed) -> int:
    """Return `seed` as an int in 0 ... 2**63 - 1, to its last digit, else raise `InputError`."""
    check_integer("seed", seed, low=0)
    if int(seed) >= SEEDS:
        raise InputError(f"seed must be below 2**63; got {seed!r}. Any smaller whole number will do.")
    return int(seed)


def _mix(x):
    """Mix 64-bit integers (Steele, Lea & Flood, OOPSLA 2014, the finaliser of SplitMix64)."""
    x = x + np.uint64(0x9E3779B97F4A7C15)
    x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return x ^ (x >> np.uint64(31))


def _as_words(numbers):
    return np.asarray(numbers, np.int64).astype(np.uint64)


def uniform(seed: int, m, n, stream=0):
    """Return numbers in (0, 1) for whole numbers m, n and stream (broadcast)."""
    with np.errstate(over="ignore"):
        word = _mix(np.uint64(seed) ^ np.uint64(0x6A09E667F3BCC909))
        word = _mix(word ^ (_as_words(m) * np.uint64(0x9E3779B97F4A7C15)))
        word = _mix(word ^ (_as_words(n) * np.uint64(0xC2B2AE3D27D4EB4F)))
        word = _mix(word ^ (_as_words(stream) * np.uint64(0xD6E8FEB86659FD93)))
    return ((word >> np.uint64(11)).astype(np.float64) + 0.5) / 2.0**53


def complex_normal(seed: int, m, n):
    """Return complex normal numbers with E|z|**2 = 1 for whole numbers m, n (Box & Muller)."""
    return np.sqrt(-np.log(uniform(seed, m, n, 0))) * np.exp(2j * np.pi * uniform(seed, m, n, 1))
