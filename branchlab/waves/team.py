"""The two threads that share the passes over one array."""

from concurrent.futures import ThreadPoolExecutor

import numpy as np

THREADS = 2
ALONE = 1 << 18  # elements that one thread transforms in a few milliseconds


class Team:
    """Python threads that each take their share of a pass; compiled passes release the interpreter."""

    def __init__(self):
        self._pool = ThreadPoolExecutor(THREADS - 1)

    def __enter__(self):
        return self

    def __exit__(self, *problem):
        self._pool.shutdown()

    def run(self, work) -> list:
        """Return work(0), work(1), ...: each on its own thread, this one among them."""
        others = [self._pool.submit(work, thread) for thread in range(1, THREADS)]
        return [work(0)] + [job.result() for job in others]


def shares(n: int, unit: int = 1) -> list[tuple[int, int]]:
    """Return (begin, end) of each thread's share of n rows, whole units except the last."""
    edges = unit * np.linspace(0, n // unit, THREADS + 1).astype(int)
    edges[-1] = n
    return list(zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True))


def workers(array) -> int:
    """Return on how many threads scipy.fft should transform an array: short work waits longer for a thread than it takes."""
    return THREADS if array.size > ALONE else 1
