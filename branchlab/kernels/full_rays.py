"""Full rays from screen to screen: the step of `plane_rays` in time, and the landing of every ray on lines x = const.

A ray is one column of a state: rows 0 x, 1 y, 2 px, 3 py, 4 action (the integral of p dr: the energy is 1/2), 5 Maslov
index, 6 fate, then four rows per tangent d(x, y, px, py), one or two. Between screens it is in the coordinates of the
kernel map.
"""

from math import isfinite

import numpy as np
from numba import njit, prange

from branchlab.kernels.plane_rays import _thirds, potential

FIXED, TANGENT = 7, 4
MASLOV, FATE = 5, 6
GOING, TURNED, LOST = 0, 2, 3  # what `fate` says; the numbers are those of the status of a ray
OUT_ROWS = 9  # y, py, action, A, C, Maslov index, fate, px, dpy/dx; then B, D
CHUNK = 64
FARTHEST = 0.75  # steps from the state at which a landing is tried
ENERGY_ERROR = 0.05  # beyond it a ray is lost: the medium is too steep for the step
_OPTIONS = {"nogil": True, "cache": True, "error_model": "numpy", "fastmath": {"contract"}}


@njit(**_OPTIONS)
def _drift(z, time):
    """Move a ray freely."""
    z[0] += time * z[2]
    z[1] += time * z[3]
    z[4] += 0.5 * time * (z[2] * z[2] + z[3] * z[3] + 1.0)
    for row in range(FIXED, z.size, TANGENT):
        z[row] += time * z[row + 2]
        z[row + 1] += time * z[row + 3]


@njit(**_OPTIONS)
def _turn(z, time, derivatives):
    """Turn a ray by a potential, given with its first and second derivatives at the ray."""
    w, w_x, w_y, w_xx, w_xy, w_yy = derivatives
    z[2] -= time * w_x
    z[3] -= time * w_y
    z[4] -= time * w
    for row in range(FIXED, z.size, TANGENT):
        dx, dy = z[row], z[row + 1]
        z[row + 2] -= time * (w_xx * dx + w_xy * dy)
        z[row + 3] -= time * (w_xy * dx + w_yy * dy)


@njit(**_OPTIONS)
def _corrected(z, extra, table, grid, box):
    """Return U = W~ + extra (grad W~)**2 at a ray, U_x, U_y, U_xx, U_xy, U_yy."""
    w, w_x, w_y, w_xx, w_xy, w_yy = potential(z[0], z[1], table, grid, box)
    w_xxx, w_xxy, w_xyy, w_yyy = _thirds(z[0], z[1], table, grid, box)
    twice = 2.0 * extra
    return (
        w + extra * (w_x * w_x + w_y * w_y),
        w_x + twice * (w_xx * w_x + w_xy * w_y),
        w_y + twice * (w_xy * w_x + w_yy * w_y),
        w_xx + twice * (w_xx * w_xx + w_xy * w_xy + w_xxx * w_x + w_xxy * w_y),
        w_xy + twice * (w_xx * w_xy + w_xy * w_yy + w_xxy * w_x + w_xyy * w_y),
        w_yy + twice * (w_xy * w_xy + w_yy * w_yy + w_xyy * w_x + w_yyy * w_y),
    )


@njit(**_OPTIONS)
def _to_true(z, strength, table, grid, box):
    """Turn a ray to true coordinates (`plane_rays.to_true`); return dpx/dt and its rate, both to second order."""
    x, y = z[0], z[1]
    _, w_x, w_y, w_xx, w_xy, w_yy = potential(x, y, table, grid, box)
    w_xxx, w_xxy, w_xyy, w_yyy = _thirds(x, y, table, grid, box)
    jxx, jxy, jyy = 1.0 + strength * w_xx, strength * w_xy, 1.0 + strength * w_yy
    det = jxx * jyy - jxy * jxy
    px, py = (jyy * z[2] - jxy * z[3]) / det, (jxx * z[3] - jxy * z[2]) / det
    z[0], z[1], z[2], z[3] = x + strength * w_x, y + strength * w_y, px, py
    for row in range(FIXED, z.size, TANGENT):
        dx, dy = z[row], z[row + 1]
        xx, xy, yy = w_xxx * dx + w_xxy * dy, w_xxy * dx + w_xyy * dy, w_xyy * dx + w_yyy * dy
        ax, ay = z[row + 2] - strength * (xx * px + xy * py), z[row + 3] - strength * (xy * px + yy * py)
        z[row], z[row + 1] = jxx * dx + jxy * dy, jxy * dx + jyy * dy
        z[row + 2], z[row + 3] = (jyy * ax - jxy * ay) / det, (jxx * ay - jxy * ax) / det
    return -w_x, -(w_xx * px + w_xy * py)


@njit(**_OPTIONS)
def _time_to(gap, px, force, rate, longest):
    """Return when gap = px t + force t**2/2 + rate t**3/6, nan if not within `longest` or not going forward there."""
    time = gap / px
    for _ in range(6):
        speed = px + time * (force + 0.5 * time * rate)
        if not (speed > 0.0 and abs(time) <= longest):
            return np.nan
        time -= (time * (px + time * (0.5 * force + time * rate / 6.0)) - gap) / speed
    return time


@njit(**_OPTIONS)
def _land(z, screen, step, strength, table, grid, box, out, screen_number, column):
    """Take a ray from the end of a step to a screen near by, and write it down; return whether it gets there.

    One step of variable length (Chin, Phys. Lett. A 226 (1997) 344, scheme A: fourth order, symplectic), which needs no
    processor, then a free fall over what its predicted length missed.
    """
    force, rate = _to_true(z, strength, table, grid, box)
    time = _time_to(screen - z[0], z[2], force, rate, FARTHEST * step) if z[2] > 0.0 else np.nan
    if not isfinite(time):
        return False
    _turn(z, time / 6.0, _corrected(z, strength, table, grid, box))
    _drift(z, 0.5 * time)
    _turn(z, time / 1.5, _corrected(z, strength - time * time / 48.0, table, grid, box))
    _drift(z, 0.5 * time)
    there = _corrected(z, strength, table, grid, box)
    _turn(z, time / 6.0, there)
    w, w_x, w_y = there[0], there[1], there[2]
    gap, px = screen - z[0], z[2]
    short = gap / (px - gap / px * w_x)
    _turn(z, short, there)
    _drift(z, short)
    px, py = z[2], z[3]
    if not px > 0.0:
        return False
    energy = 0.5 * (px * px + py * py) + w
    if not abs(energy - 0.5) < ENERGY_ERROR:
        z[FATE] = LOST
    # tangents are carried along the flow f = (px, py, -w_x, -w_y) to fixed x. With two of them f gets O(step**4) of both,
    # so that the area they span, 1 in all of phase space, is 1 on the screen too
    first, second = 0.0, 0.0
    if z.size == FIXED + 2 * TANGENT:
        a, b = FIXED, FIXED + TANGENT
        first = z[b] * -w_x + z[b + 1] * -w_y - z[b + 2] * px - z[b + 3] * py
        second = -(z[a] * -w_x + z[a + 1] * -w_y - z[a + 2] * px - z[a + 3] * py)
        px += first * z[a] + second * z[b]
        py += first * z[a + 1] + second * z[b + 1]
        w_y -= first * z[a + 3] + second * z[b + 3]
    for row in range(FIXED, z.size, TANGENT):
        time = -z[row] / px
        at = 3 if row == FIXED else OUT_ROWS
        out[screen_number, at, column] = z[row + 1] + time * py
        out[screen_number, at + 1, column] = z[row + 3] - time * w_y
    a, c = out[screen_number, 3, column], out[screen_number, 4, column]
    maslov = z[MASLOV]
    odd = (maslov % 2.0) != 0.0
    if (a < 0.0) != odd:  # counted on the kernel map, whose caustics lie O(step**2) from the true ones
        maslov += 1.0 if a * c > 0.0 else -1.0
    out[screen_number, 0, column] = z[1]
    out[screen_number, 1, column] = z[3]
    out[screen_number, 2, column] = z[4]
    out[screen_number, 5, column] = maslov
    out[screen_number, 6, column] = z[FATE]
    out[screen_number, 7, column] = z[2]
    out[screen_number, 8, column] = -w_y / z[2]
    return True


@njit(**_OPTIONS)
def _fly(z, screen):
    """Take a ray that is beyond the sides of an open box, where W is even, to a screen."""
    time = (screen - z[0]) / z[2]
    z[4] += time * (z[2] * z[2] + z[3] * z[3]) - 0.5 * time * (z[2] * z[2] + z[3] * z[3] + 1.0)
    _drift(z, time)


@njit(parallel=True, **_OPTIONS)
def march_to_screens(state, out, screens, table, grid, box, edge, step, strength, most):
    """March rays to the next screens, and write down where and how each of them crosses.

    Parameters
    ----------
    state : ndarray, shape (FIXED + TANGENT or FIXED + 2 TANGENT, ray)
        Coordinates of the kernel map, changed in place.
    out : ndarray, shape (screen, OUT_ROWS or OUT_ROWS + 2, ray)
        Set to the true coordinates at the first forward crossing of each screen, filled with the last crossing, or with
        what was there, for a ray that does not arrive.
    screens : ndarray, shape (screen,)
        Rising.
    table, grid, box :
        The spline of W~ (see `plane_rays.potential`).
    edge : float
        Where abs(y) exceeds it W is even, and a ray that goes outward flies on; inf where the sides repeat.
    step, strength : float
        The step in time, and step**2/24.
    most : int
        Steps after which a ray counts as lost.
    """
    rays = state.shape[1]
    for chunk in prange((rays + CHUNK - 1) // CHUNK):
        z = np.empty(state.shape[0])
        landing = np.empty_like(z)
        for i in range(chunk * CHUNK, min((chunk + 1) * CHUNK, rays)):
            z[:] = state[:, i]
            number, steps = 0, 0
            area = z[2] * z[FIXED + 1] - z[3] * z[FIXED]
            while z[FATE] == GOING and number < screens.size:
                outside = abs(z[1]) > edge and z[1] * z[3] > 0.0
                while number < screens.size and (outside or z[0] + 0.5 * step * z[2] >= screens[number]):
                    landing[:] = z
                    if outside:
                        _fly(landing, screens[number])
                    landed = _land(landing, screens[number], step, strength, table, grid, box, out, number, i)
                    if not landed:
                        break
                    z[FATE] = landing[FATE]
                    number += 1
                if number == screens.size or z[FATE] != GOING:
                    break
                if z[0] >= screens[number]:  # it grazes the screen at its turning point
                    z[FATE] = TURNED
                    break
                _drift(z, 0.5 * step)
                _turn(z, step, potential(z[0], z[1], table, grid, box))
                _drift(z, 0.5 * step)
                before, area = area, z[2] * z[FIXED + 1] - z[3] * z[FIXED]
                if (before < 0.0) != (area < 0.0):
                    z[MASLOV] += 1.0
                steps += 1
                if not z[2] > 0.0:
                    z[FATE] = TURNED if z[2] <= 0.0 else LOST
                elif steps >= most:
                    z[FATE] = LOST
            for rest in range(number, screens.size):
                for row in range(out.shape[1]):
                    out[rest, row, i] = out[number - 1, row, i] if number > 0 else out[rest, row, i]
                out[rest, 6, i] = z[FATE]
            state[:, i] = z
