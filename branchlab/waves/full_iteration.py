"""Flexible GMRES with the sweeps, stopped by an estimate of the error."""

import math

import attrs
import numpy as np
import scipy.fft

SAFETY = 1.5  # of the error estimate; without it estimate/truth was in [0.74, 2.6] in 68 runs
SLOW = 0.25  # residual ratio of one iteration above which marches along y join
STALLED = 0.95  # mean residual ratio over STALL_SPAN iterations above which the sweeps are given up
STALL_SPAN = 8
MOST_ITERATIONS = 100
RHO = 0.95  # largest contraction that the error estimate believes
LINES = 64  # rows that are looked at for waves along y
ALONG_SIDES = 0.85, 1.05  # of k: wavenumbers along y of such waves
WAY_ROUND, WAY_OUT = (
    0.15,
    0.05,
)  # how far they go on adding up, in lengths of the box; with periodic and absorbing sides
WORTHWHILE = 8.0  # correction is made when the residual says that the error may be this many tolerances


@attrs.frozen(slots=False, eq=False)
class Solved:
    """A field, how it was found and how wrong it is.

    Attributes
    ----------
    field : ndarray
    correction : ndarray
        The last correction; what is left after it is like it, and smaller by `contraction`.
    contraction : float
        By which an iteration makes the correction smaller.
    unseen : float
        Estimated part of the error that waves along y make, which marches along x do not see.
    error : float
        Estimated error of `field`, 1.5 contraction/(1 - contraction) times the size of the correction, and `unseen`.
    residual : float
        norm(b - A x)/norm(b), before the last correction.
    iterations : int
    converged : bool
    """

    field: np.ndarray
    correction: np.ndarray
    contraction: float
    unseen: float
    error: float
    residual: float
    iterations: int
    converged: bool

    @property
    def left(self) -> float:
        """Size of the error that `field` may have, over that of the correction, which it resembles."""
        return SAFETY * self.contraction / (1.0 - self.contraction)


def _contraction(history) -> float:
    """Return the mean residual ratio of the last two iterations, at most RHO."""
    last = history[-3:]
    return min(RHO, (last[-1] / last[0]) ** (1.0 / (len(last) - 1)))


def sweep_iteration(operator, sweeps, b, scale: float, tolerance: float, report, kept: int) -> Solved:
    """Solve A x = b by flexible GMRES (Saad, SIAM J. Sci. Comput. 14 (1993) 461), preconditioned by the sweeps.

    A new direction z = M v is the first thing an iteration makes. With it comes the correction M r of the answer so
    far, for the residual r is a combination of the v. Its size, times the contraction, is the error that is left once
    it is added: error = 1.5 rho/(1 - rho) norm(M r), rho the mean residual ratio of the last two iterations.

    Parameters
    ----------
    operator : DampedOperator
    sweeps : Sweeps
    b : ndarray
    scale : float
        Norm that errors are relative to.
    tolerance : float
    report : callable
        report(share) is called once an iteration; it may raise.
    kept : int
        Iterations whose fields fit into memory; then the iteration starts again from its answer.
    """
    whole = operator.norm(b)
    if whole == 0.0:
        return Solved(b, b, 0.0, 0.0, 0.0, 0.0, 0, True)
    x, residual, history, count = None, b, [1.0], 0
    room = None  # a field that is not needed any more: fresh memory costs as much as a sweep
    while True:
        beta = operator.norm(residual)
        basis, found = [residual * operator.dtype.type(1.0 / beta)], []
        matrix = np.zeros((kept + 1, kept), complex)
        weights, left = np.zeros(0, complex), np.array([beta], complex)
        begun = len(history)
        for j in range(kept + 1):
            z = operator.empty()
            sweeps.apply(z, basis[j])
            found.append(z)
            rho = _contraction(history) if count else RHO
            since = min(STALL_SPAN, len(history) - begun)
            stalled = since == STALL_SPAN and history[-1] > STALLED**STALL_SPAN * history[-1 - STALL_SPAN]
            last = stalled or count >= MOST_ITERATIONS
            if last or j == kept or (count and np.linalg.norm(left) * rho < WORTHWHILE * tolerance * scale):
                correction = operator.empty() if room is None else room
                _combine(operator, correction, left, found)
                size = operator.norm(correction)
                if count == 1:  # the residual's first fall is mostly that of waves that do not travel
                    rho = min(rho, size / (beta * operator.norm(found[0])))
                unseen = 0.0 if sweeps.wide else _along_sides(operator, left, basis) / scale
                error = SAFETY * rho / (1.0 - rho) * size / scale + unseen
                if last or j == kept or error <= tolerance:
                    answer = found.pop() if len(found) > 1 else operator.empty()
                    np.copyto(answer, correction)
                    for weight, one in zip(weights, found, strict=False):
                        operator.add_scaled(answer, weight, one)
                    if x is not None:
                        operator.add_scaled(answer, 1.0, x)
                    x = answer
                    if last or error <= tolerance:
                        return Solved(x, correction, rho, unseen, error, history[-1], count, error <= tolerance)
                    break
                if unseen > 0.5 * tolerance:
                    sweeps.widen()
                room = correction
            w, room = (operator.empty() if room is None else room), None
            operator.apply(w, z)
            for i, one in enumerate(basis):
                matrix[i, j] = operator.inner(one, w)
                operator.add_scaled(w, -matrix[i, j], one)
            matrix[j + 1, j] = operator.norm(w)
            w *= operator.dtype.type(1.0 / max(matrix[j + 1, j].real, 1e-300))
            basis.append(w)
            start = np.zeros(j + 2, complex)
            start[0] = beta
            weights = np.linalg.lstsq(matrix[: j + 2, : j + 1], start, rcond=None)[0]
            left = start - matrix[: j + 2, : j + 1] @ weights
            history.append(max(float(np.linalg.norm(left)) / whole, 1e-300))
            count += 1
            report(min(0.95, math.log(history[-1]) / math.log(0.1 * tolerance)))
            if not sweeps.wide and count > 1 and history[-1] > SLOW * history[-2]:
                sweeps.widen()
        residual = operator.empty()
        operator.apply(residual, x)
        np.subtract(b, residual, out=residual)


def _combine(operator, out, weights, fields) -> None:
    """Set `out` to the sum of weights times fields."""
    np.multiply(fields[0], operator.dtype.type(weights[0]), out=out)
    for weight, field in zip(weights[1:], fields[1:], strict=True):
        operator.add_scaled(out, weight, field)


def _along_sides(operator, weights, basis) -> float:
    """Return how large the waves along y may be that a residual drives, from some of its rows.

    They are driven with k eps/2 a length, for a way that is a share of the box: on periodic sides until they have
    left along x. The shares are bounds from twenty runs, 2 to 30 times the waves that were there.
    """
    grid = operator.grid
    rows = np.arange(0, grid.shape[0], max(1, grid.shape[0] // LINES))
    some = sum(weight * field[rows] for weight, field in zip(weights, basis, strict=True))
    low, high = ALONG_SIDES
    along = (np.abs(grid.qy) > low * grid.k) & (np.abs(grid.qy) < high * grid.k)
    part = np.linalg.norm(scipy.fft.fft(some, axis=1, norm="ortho")[:, along])
    way = WAY_OUT * grid.span[1] if grid.pad_y else WAY_ROUND * grid.span[0]
    return 0.5 * grid.k * operator.eps * way * float(part) * math.sqrt(grid.shape[0] / rows.size)
