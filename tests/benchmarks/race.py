"""Races of several ways to do one thing: best times of interleaved rounds in one process."""

import contextlib
import time

import numba


def best(ways, rounds, clock=time.perf_counter):
    """Return the shortest time of each way, a dict from names to functions; rounds interleaved."""
    times = dict.fromkeys(ways, float("inf"))
    for _ in range(rounds):
        for name, way in ways.items():
            begin = clock()
            way()
            times[name] = min(times[name], clock() - begin)
    return times


@contextlib.contextmanager
def threads(count):
    """Run compiled loops on so many threads; threads that wait for one another time the machine's other users."""
    before = numba.get_num_threads()
    numba.set_num_threads(count)
    try:
        yield
    finally:
        numba.set_num_threads(before)


def print_times(times, unit, reference):
    """Print each time in ns per unit of work, and as a multiple of the time of reference."""
    for name, seconds in times.items():
        print(f"  {name:42s} {seconds * 1e9 / unit:9.2f} ns  {seconds / reference:8.2f}")
