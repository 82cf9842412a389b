"""Flexible GMRES with the sweeps, stopped by an estimate of the error, and the Born series behind it."""

import attrs
import numpy as np


SAFETY = 1.5  # of the error estimate: scan of 68 runs, estimate/truth in [0.74, 2.6] without it
SLOW = 0.25  # residual ratio of one iteration above which marches along y join
STALLED = 0.93  # mean residual ratio over STALL_SPAN iterations above which the sweeps are given up
STALL_SPAN = 8
MOST_ITERATIONS = 80
KEPT = 24  # iterations whose fields are kept before a restart


@attrs.frozen(slots=False, eq=False)
class Solved:
    """A field, how it was found and how wrong it is.

    Attributes
    ----------
    field : ndarray
    correction : ndarray
        M r, the last correction; what is left after it is smaller by `contraction`.
    contraction : float
        Mean residual ratio of the last iterations.
    error : float
        Estimated error of `field`, relative to `scale`.
    residual : float
        norm(b - A x)/norm(b).
    iterations : int
    converged : bool
    """

    field: np.ndarray
    correction: np.ndarray
    contraction: float
    error: float
    residual: float
    iterations: int
    converged: bool


def _ratio(history) -> float:
    """Mean residual ratio of the last two iterations, below 1."""
    last = history[-3:]
    return min(0.95, (last[-1] / last[0]) ** (1.0 / (len(last) - 1)))


def sweep_iteration(operator, sweeps, b, scale: float, tolerance: float, report, kept: int = KEPT) -> Solved:
    """Solve A x = b by flexible GMRES (Saad, SIAM J. Sci. Comput. 14 (1993) 461), preconditioned by the sweeps.

    The preconditioned new direction z = M v, which an iteration makes first, already gives the correction M r of the
    answer so far, r being a combination of the v. Its size, times the contraction, is the error that is left once it is
    added: error = 1.5 rho/(1 - rho) norm(M r), rho the mean residual ratio of the last two iterations.

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
    x, count = None, 0
    if whole == 0.0:
        zero = np.zeros_like(b)
        return Solved(zero, zero, 0.0, 0.0, 0.0, 0, True)
    history = [1.0]
    residual = b
    while True:
        beta = operator.norm(residual)
        basis, found = [residual / operator.dtype.type(beta)], []
        matrix = np.zeros((kept + 1, kept), complex)
        weights, left = np.zeros(0, complex), np.array([beta], complex)
        for j in range(kept + 1):
            z = operator.empty()
            sweeps.apply(z, basis[j])
            found.append(z)
            norms = np.linalg.norm(left)
            rho = _ratio(history) if len(history) > 1 else 1.0
            last = j == kept or count >= MOST_ITERATIONS
            stalled = len(history) > STALL_SPAN and history[-1] > STALLED**STALL_SPAN * history[-1 - STALL_SPAN]
            # the correction costs a pass over all fields: made when it may be the last
            if len(history) > 1 and (last or stalled or 2.0 * norms * rho < 8.0 * tolerance * scale):
                correction = _combination(operator, left, found)
                size = operator.norm(correction)
                error = SAFETY * rho / (1.0 - rho) * size / scale
                if error <= tolerance or last or stalled:
                    answer = correction.copy()
                    for weight, one in zip(weights, found[: len(weights)], strict=True):
                        operator.add_scaled(answer, weight, one)
                    if x is not None:
                        operator.add_scaled(answer, 1.0, x)
                    if error <= tolerance or stalled or count >= MOST_ITERATIONS:
                        return Solved(answer, correction, rho, error, history[-1], count, error <= tolerance)
                    x = answer
                    break
            w = operator.empty()
            operator.apply(w, z)
            for i, one in enumerate(basis):
                matrix[i, j] = operator.inner(one, w)
                operator.add_scaled(w, -matrix[i, j], one)
            matrix[j + 1, j] = operator.norm(w)
            small = matrix[: j + 2, : j + 1]
            start = np.zeros(j + 2, complex)
            start[0] = beta
            weights = np.linalg.lstsq(small, start, rcond=None)[0]
            left = start - small @ weights
            history.append(float(np.linalg.norm(left)) / whole)
            count += 1
            report(min(0.95, np.log(max(history[-1], 1e-16)) / np.log(max(0.1 * tolerance, 1e-15))))
            if not sweeps.wide and count > 1 and history[-1] > SLOW * history[-2]:
                sweeps.widen()
            w *= operator.dtype.type(1.0 / matrix[j + 1, j].real)
            basis.append(w)
        residual = operator.empty()
        operator.apply(residual, x)
        residual *= -1
        residual += b


def _combination(operator, weights, fields) -> np.ndarray:
    total = np.zeros_like(fields[0])
    for weight, field in zip(weights, fields, strict=True):
        operator.add_scaled(total, weight, field)
    return total
