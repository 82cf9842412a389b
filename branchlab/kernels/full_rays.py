"""Full rays from screen to screen: the step of `plane_rays` in time, eight rays at once, and their landing on lines x = const.

A ray is one column of a state: rows 0 x, 1 y, 2 px, 3 py, 4 action (the integral of p dr: the energy is 1/2), 5 Maslov
index, 6 fate, 7 pace (the step, or 0 for a ray that waits), then four rows per tangent d(x, y, px, py), one or two. Between
screens it is in the coordinates of the kernel map.
"""

import numpy as np
from numba import njit, prange, types
from numba.core import cgutils
from numba.extending import intrinsic
from numba.np.arrayobj import make_array

from branchlab.kernels.eight import LANES, load, row_addresses, spline_rows, spread, store
from branchlab.kernels.ray_step import taylor

FIXED, TANGENT = 8, 4
MASLOV, FATE, PACE = 5, 6, 7
GOING, TURNED, LOST = 0, 2, 3  # what `fate` says; the numbers are those of the status of a ray
OUT_ROWS = 9  # y, py, action, A, C, Maslov index, fate, px, dpy/dx; then B, D
GROUPS = 8  # of eight rays, that one thread takes at a time
NEWTON_STEPS = 4
FARTHEST = 1.25  # steps from the state at which a landing is believed
ENERGY_ERROR = 0.05  # beyond it a ray is lost: the medium is too steep for the step
QUICK = 0.5  # px above which a ray lands from the nearer end of a step; slower ones from behind the screen
_OPTIONS = {"nogil": True, "cache": True, "error_model": "numpy"}


class _Spline:
    """The biquintic spline of W~ while code for eight rays is being written."""

    def __init__(self, context, builder, kind, table, look):
        self.builder, self.data = builder, make_array(kind)(context, builder, table).data
        numbers = [spread(builder, number) for number in cgutils.unpack_tuple(builder, look)]
        self.nx, self.ny, self.wraps, self.start_x, self.start_y, self.inverse_x, self.inverse_y = numbers

    def _cells(self, u, v):
        """Return the numbers of the patches, eight words, and the places in them, of places in cells."""
        round_ = v - self.ny * (v * (1.0 / self.ny)).floor()
        v = (self.wraps * -1.0).below_zero(round_, v)
        u = u.at_least(0.0).at_most(self.nx - 1.0)  # along x, and at open sides, not beyond the last sample
        v = v.at_least(0.0).at_most((self.wraps * -1.0).below_zero(self.ny, self.ny - 1.0))
        i = u.floor().at_most(self.nx - 2.0)
        j = v.floor().at_most(self.ny - 1.0)
        j = (self.wraps * -1.0).below_zero(j, j.at_most(self.ny - 2.0))
        return (i * self.ny + j).whole(), u - i, v - j

    def at(self, x, y, thirds: bool):
        """Return W, W_x, W_y, W_xx, W_xy, W_yy and, if wanted, W_xxx, W_xxy, W_xyy, W_yyy."""
        ix, iy = self.inverse_x, self.inverse_y
        patch, s, t = self._cells((x - self.start_x) * ix, (y - self.start_y) * iy)
        order = 3 if thirds else 2
        rows = [taylor(t, spline_rows(self.builder, self.data, patch, 6, row), order) for row in range(6)]
        by_y = list(zip(*rows, strict=True))  # [order in y][row]
        value, slope, half = (taylor(s, list(by_y[k]), order - k) for k in range(3))
        found = [
            value[0], value[1] * ix, slope[0] * iy, value[2] * (2.0 * (ix * ix)), slope[1] * (ix * iy),
            half[0] * (2.0 * (iy * iy)),
        ]  # fmt: skip
        if thirds:
            sixth = taylor(s, list(by_y[3]), 0)
            found += [value[3] * (6.0 * (ix * ix * ix)), slope[2] * (2.0 * (ix * ix * iy))]
            found += [half[1] * (2.0 * (iy * iy * ix)), sixth[0] * (6.0 * (iy * iy * iy))]
        return found

    def corrected(self, ray, extra):
        """Return U = W~ + extra (grad W~)**2 at rays, U_x, U_y, U_xx, U_xy, U_yy."""
        w, w_x, w_y, w_xx, w_xy, w_yy, w_xxx, w_xxy, w_xyy, w_yyy = self.at(ray.x, ray.y, thirds=True)
        twice = 2.0 * extra
        return (
            w + extra * (w_x * w_x + w_y * w_y),
            w_x + twice * (w_xx * w_x + w_xy * w_y),
            w_y + twice * (w_xy * w_x + w_yy * w_y),
            w_xx + twice * (w_xx * w_xx + w_xy * w_xy + w_xxx * w_x + w_xxy * w_y),
            w_xy + twice * (w_xx * w_xy + w_xy * w_yy + w_xxy * w_x + w_xyy * w_y),
            w_yy + twice * (w_xy * w_xy + w_yy * w_yy + w_xyy * w_x + w_yyy * w_y),
        )


class _Rays:
    """Eight rays while code for them is being written."""

    def __init__(self, builder, address, tangents: int):
        self.x, self.y, self.px, self.py, self.action = (load(builder, address(row)) for row in range(5))
        self.tangents = [
            [load(builder, address(FIXED + TANGENT * k + row)) for row in range(TANGENT)] for k in range(tangents)
        ]

    def drift(self, time):
        """Move freely."""
        self.x, self.y = self.x + time * self.px, self.y + time * self.py
        self.action = self.action + (0.5 * time) * (self.px * self.px + self.py * self.py + 1.0)
        for one in self.tangents:
            one[0], one[1] = one[0] + time * one[2], one[1] + time * one[3]

    def turn(self, time, derivatives):
        """Turn by a potential, given with its first and second derivatives at the rays."""
        w, w_x, w_y, w_xx, w_xy, w_yy = derivatives
        self.px, self.py = self.px - time * w_x, self.py - time * w_y
        self.action = self.action - time * w
        for one in self.tangents:
            one[2] = one[2] - time * (w_xx * one[0] + w_xy * one[1])
            one[3] = one[3] - time * (w_xy * one[0] + w_yy * one[1])

    def area(self):
        """Return px A: the first tangent across the ray."""
        dx, dy = self.tangents[0][:2]
        return self.px * dy - self.py * dx

    def to_true(self, spline, strength):
        """Turn to true coordinates (`plane_rays.to_true`); return dpx/dt and its rate, both to second order."""
        w_x, w_y, w_xx, w_xy, w_yy, w_xxx, w_xxy, w_xyy, w_yyy = spline.at(self.x, self.y, thirds=True)[1:]
        jxx, jxy, jyy = 1.0 + strength * w_xx, strength * w_xy, 1.0 + strength * w_yy
        over = 1.0 / (jxx * jyy - jxy * jxy)
        px, py = (jyy * self.px - jxy * self.py) * over, (jxx * self.py - jxy * self.px) * over
        self.x, self.y, self.px, self.py = self.x + strength * w_x, self.y + strength * w_y, px, py
        for one in self.tangents:
            dx, dy, ax, ay = one
            xx, xy, yy = w_xxx * dx + w_xxy * dy, w_xxy * dx + w_xyy * dy, w_xyy * dx + w_yyy * dy
            ax, ay = ax - strength * (xx * px + xy * py), ay - strength * (xy * px + yy * py)
            one[:] = (
                jxx * dx + jxy * dy,
                jxy * dx + jyy * dy,
                (jyy * ax - jxy * ay) * over,
                (jxx * ay - jxy * ax) * over,
            )
        return w_x * -1.0, (w_xx * px + w_xy * py) * -1.0


def _step(tangents):
    """Return the code that takes eight rays through one step, each at its pace, and counts caustics."""

    def generate(context, builder, signature, args):
        state, column, table, look = args
        address = row_addresses(context, builder, signature.args[0], state, column)
        spline = _Spline(context, builder, signature.args[2], table, look)
        rays = _Rays(builder, address, tangents)
        pace, before = load(builder, address(PACE)), rays.area()
        rays.drift(0.5 * pace)
        rays.turn(pace, spline.at(rays.x, rays.y, thirds=False))
        rays.drift(0.5 * pace)
        store(load(builder, address(MASLOV)) + rays.area().crossed(before), address(MASLOV))
        numbers = [rays.x, rays.y, rays.px, rays.py, rays.action]
        for row, number in enumerate(numbers):
            store(number, address(row))
        for k, one in enumerate(rays.tangents):
            for row, number in enumerate(one):
                store(number, address(FIXED + TANGENT * k + row))
        return context.get_dummy_value()

    return generate


def _land(tangents):
    """Return the code that takes eight rays from the end of a step to a screen near by, and writes them down.

    One step of the right length (Chin, Phys. Lett. A 226 (1997) 344, scheme A: fourth order, symplectic), which needs no
    processor, then a free fall over what its predicted length missed.
    """

    def generate(context, builder, signature, args):
        waiting, out, column, table, look, screen, step, strength = args
        zero = context.get_constant(types.intp, 0)
        here = row_addresses(context, builder, signature.args[0], waiting, zero)
        there = row_addresses(context, builder, signature.args[1], out, column)
        spline = _Spline(context, builder, signature.args[3], table, look)
        screen, step, strength = (spread(builder, number) for number in (screen, step, strength))
        rays = _Rays(builder, here, tangents)
        force, rate = rays.to_true(spline, strength)
        gap = screen - rays.x
        time = gap / rays.px
        for _ in range(NEWTON_STEPS):  # gap = px t + force t**2/2 + rate t**3/6
            speed = rays.px + time * (force + 0.5 * (time * rate))
            time = time - (time * (rays.px + time * (0.5 * force + time * rate * (1.0 / 6.0))) - gap) / speed
        far = time * time - (FARTHEST * FARTHEST) * (step * step)
        rays.turn(time * (1.0 / 6.0), spline.corrected(rays, strength))
        rays.drift(0.5 * time)
        rays.turn(time * (2.0 / 3.0), spline.corrected(rays, strength - time * time * (1.0 / 48.0)))
        rays.drift(0.5 * time)
        potential = spline.corrected(rays, strength)
        w, w_x, w_y = potential[:3]
        rays.turn(time * (1.0 / 6.0), potential)
        gap = screen - rays.x
        short = gap / (rays.px - gap / rays.px * w_x)
        rays.turn(short, potential)
        rays.drift(short)
        px, py = rays.px, rays.py
        excess = (px * px + py * py + 2.0 * w - 1.0) * 0.5
        fate = (excess * excess - ENERGY_ERROR**2).below_zero(float(GOING), float(LOST))
        fate = far.below_zero((px * -1.0).below_zero(fate, float(TURNED)), float(TURNED))
        store(rays.y, there(0))
        store(py, there(1))
        store(rays.action, there(2))
        store(fate, there(6))
        store(px, there(7))
        store((w_y * -1.0) / px, there(8))
        projected = _projected(rays, w_x, w_y)
        for k, (a, c) in enumerate(projected):
            store(a, there(3 if k == 0 else OUT_ROWS))
            store(c, there(4 if k == 0 else OUT_ROWS + 1))
        a, c = projected[0]
        maslov = load(builder, here(MASLOV))
        odd = maslov - 2.0 * (0.5 * maslov).floor()
        # counted on the kernel map, whose caustics lie O(step**2) from the true ones: made to agree with the sign of A
        change = (a * c * -1.0).below_zero(1.0, -1.0)
        store(maslov + (a * (1.0 + -2.0 * odd)).below_zero(change, 0.0), there(MASLOV))
        return context.get_dummy_value()

    return generate


def _projected(rays, w_x, w_y):
    """Return the tangents (dy, dpy) carried along the flow f = (px, py, -w_x, -w_y) to fixed x.

    With two of them f gets O(step**4) of both, so that the area they span, 1 in all of phase space, is 1 on the screen too.
    """
    px, py, fall = rays.px, rays.py, w_y * -1.0
    if len(rays.tangents) == 2:
        a, b = rays.tangents
        first = (b[0] * w_x + b[1] * w_y + b[2] * px + b[3] * py) * -1.0
        second = a[0] * w_x + a[1] * w_y + a[2] * px + a[3] * py
        px, py = px + first * a[0] + second * b[0], py + first * a[1] + second * b[1]
        fall = fall + first * a[3] + second * b[3]
    return [(one[1] - one[0] / px * py, one[3] - one[0] / px * fall) for one in rays.tangents]


@intrinsic
def step_front(typingctx, state, column, table, look):  # noqa: ARG001
    """Take eight rays with one tangent, from `column` on, through one step."""
    return types.void(state, types.intp, table, look), _step(1)


@intrinsic
def step_matrix(typingctx, state, column, table, look):  # noqa: ARG001
    """Take eight rays with two tangents, from `column` on, through one step."""
    return types.void(state, types.intp, table, look), _step(2)


@intrinsic
def land_front(typingctx, waiting, out, column, table, look, screen, step, strength):  # noqa: ARG001
    """Land eight rays with one tangent, and write them down from `column` on."""
    return types.void(waiting, out, types.intp, table, look, *[types.float64] * 3), _land(1)


@intrinsic
def land_matrix(typingctx, waiting, out, column, table, look, screen, step, strength):  # noqa: ARG001
    """Land eight rays with two tangents, and write them down from `column` on."""
    return types.void(waiting, out, types.intp, table, look, *[types.float64] * 3), _land(2)


@njit(**_OPTIONS)
def _wait(state, i, waiting, lane, screen, outside):
    """Put a ray down to be landed; one beyond open sides, where W is even, flies to the screen."""
    for row in range(state.shape[0]):
        waiting[row, lane] = state[row, i]
    if outside:
        px, py = state[2, i], state[3, i]
        time = (screen - state[0, i]) / px
        waiting[0, lane] += time * px
        waiting[1, lane] += time * py
        waiting[4, lane] += time * (px * px + py * py)
        for row in range(FIXED, state.shape[0], TANGENT):
            waiting[row, lane] += time * state[row + 2, i]
            waiting[row + 1, lane] += time * state[row + 3, i]


@njit(**_OPTIONS)
def _look(state, begin, number, waiting, screens, edge, step):
    """Put down the rays that are at their next screen, and set the pace of all; return whether any goes on."""
    busy = False
    for lane in range(LANES):
        i = begin + lane
        if state[FATE, i] == GOING and not state[2, i] > 0.0:
            state[FATE, i] = TURNED if state[2, i] <= 0.0 else LOST
        going = state[FATE, i] == GOING and number[lane] < screens.size
        if going:
            x, y, px = state[0, i], state[1, i], state[2, i]
            outside = abs(y) > edge and y * state[3, i] > 0.0
            reach = x + 0.5 * step * px if px > QUICK else x
            while number[lane] < screens.size and (outside or reach >= screens[number[lane]]):
                n = number[lane]
                _wait(state, i, waiting[n], lane, screens[n], outside)
                number[lane] += 1
            going = number[lane] < screens.size
        state[PACE, i] = step if going else 0.0
        busy = busy or going
    return busy


@njit(**_OPTIONS)
def _settle(state, begin, number, out, last):
    """Give the rays that did not get to a screen the numbers of the screen before, and their fate."""
    for lane in range(LANES):
        i, fate = begin + lane, 0.0
        for n in range(out.shape[0]):
            if fate == GOING:
                fate = out[n, 6, i] if n < number[lane] else state[FATE, i]
            if fate != GOING:
                for row in range(out.shape[1]):
                    out[n, row, i] = out[n - 1, row, i] if n > 0 else last[row, i]
                out[n, 6, i] = fate
        state[FATE, i] = fate if fate != GOING else state[FATE, i]


@njit(parallel=True, **_OPTIONS)
def march_to_screens(state, out, last, screens, table, grid, box, edge, step, strength, most):
    """March rays to the next screens, and write down where and how each of them crosses.

    Parameters
    ----------
    state : ndarray, shape (FIXED + TANGENT or FIXED + 2 TANGENT, ray)
        Coordinates of the kernel map, changed in place; the number of rays is a multiple of LANES.
    out : ndarray, shape (screen, OUT_ROWS or OUT_ROWS + 2, ray)
        Set to the true coordinates at the first forward crossing of each screen, and to those on the screen before for a
        ray that does not arrive.
    last : ndarray, shape (OUT_ROWS or OUT_ROWS + 2, ray)
        What stands before the first of these screens.
    screens : ndarray, shape (screen,)
        Rising.
    table, grid, box :
        The spline of W~ (see `plane_rays.potential`); along x it must not repeat.
    edge : float
        Where abs(y) exceeds it W is even, and a ray that goes outward flies on; inf where the sides repeat.
    step, strength : float
        The step in time, and step**2/24.
    most : int
        Steps after which a ray counts as lost.
    """
    look = (float(grid[0]), float(grid[1]), 1.0 if grid[3] else 0.0, box[0], box[1], box[2], box[3])
    both = state.shape[0] == FIXED + 2 * TANGENT
    size = LANES * GROUPS
    for chunk in prange((state.shape[1] + size - 1) // size):
        waiting = np.zeros((screens.size, state.shape[0], LANES))
        number = np.zeros(LANES, dtype=np.int64)
        for begin in range(chunk * size, min((chunk + 1) * size, state.shape[1]), LANES):
            number[:] = 0
            waiting[:, 2] = 1.0
            steps = 0
            while _look(state, begin, number, waiting, screens, edge, step):
                if steps == most:
                    for i in range(begin, begin + LANES):
                        state[FATE, i] = LOST if state[PACE, i] > 0.0 else state[FATE, i]
                    break
                steps += 1
                if both:
                    step_matrix(state, begin, table, look)
                else:
                    step_front(state, begin, table, look)
            for n in range(screens.size):
                if both:
                    land_matrix(waiting[n], out[n], begin, table, look, screens[n], step, strength)
                else:
                    land_front(waiting[n], out[n], begin, table, look, screens[n], step, strength)
            _settle(state, begin, number, out, last)
