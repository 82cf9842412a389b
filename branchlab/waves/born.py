"""The convergent Born series: slow, and sure."""

import numpy as np

from branchlab.waves.full_iteration import SAFETY, Solved

LEAST_MARGIN = 1.05  # of the loss over the largest abs(v - i w): the series converges above 1
PATHS = 12.0  # how often a wave may cross the box before the series is given up
LONGEST = 20000  # iterations


def born_loss(v, grid) -> float:
    """Return the loss eps that makes the series converge: above the largest abs(v - i w)."""
    return LEAST_MARGIN * float(np.hypot(np.abs(v).max(), grid.loss_x.max() + grid.loss_y.max()))


def born_iteration(operator, b, start, scale: float, tolerance: float, report) -> Solved:
    """Solve A psi = b by psi <- psi + gamma (b - A psi), gamma = 1 - (w + i v)/eps.

    It converges for every v if eps > abs(v - i w) everywhere (Osnabrugge, Leedumrongwatthanakun & Vellekoop,
    J. Comput. Phys. 322 (2016) 113; gamma there is i V/eps), and moves a wave by about 2/(k eps) an iteration.

    Parameters
    ----------
    operator : DampedOperator
        Made with the loss of `born_loss`.
    b : ndarray
    start : ndarray
        First guess; it is changed.
    scale, tolerance : float
        As for `sweep_iteration`.
    report : callable
        report(share) is called now and then; it may raise.
    """
    grid, dtype = operator.grid, operator.dtype
    loss = (grid.loss_x[:, None] + grid.loss_y).astype(operator.v.dtype)
    gamma = (1.0 - (loss + 1j * operator.v) / operator.eps).astype(dtype)
    whole = operator.norm(b)
    crossing = 0.5 * grid.k * operator.eps * max(grid.span)
    most = int(min(LONGEST, 100.0 + PATHS * crossing))
    field, change = start, operator.empty()
    sizes, error = [], np.inf
    for count in range(1, most + 1):
        operator.apply(change, field)
        np.subtract(b, change, out=change)
        residual = operator.norm(change) / whole if count % 10 == 0 else None
        change *= gamma
        field += change
        if residual is None:
            continue
        sizes.append(operator.norm(change))
        report(min(0.95, count / most))
        if len(sizes) < 4:
            continue
        # the mean over thirty iterations: single ones go up and down
        rho = (sizes[-1] / sizes[-4]) ** (1.0 / 30.0) if sizes[-4] else 0.0
        error = SAFETY * rho / (1.0 - rho) * sizes[-1] / scale if rho < 1.0 else np.inf
        if error <= tolerance:
            break
    return Solved(field, change, rho, 0.0, error, residual, count, error <= tolerance)
