"""Where the branches of a launching front land: inversion of y(s) on a grid.

Between neighbouring rays i and j = i + 1 the front is the cubic Hermite curve of (y, dy/ds); p likewise. A
branch is a stretch of the front on which y is monotone; two branches meet at a fold.
"""

from math import ceil, sqrt

from numba import njit

FAR = 1e300  # a ray beyond (or nan) is missing

_OPTIONS = {"nogil": True, "cache": True, "error_model": "numpy"}


@njit(**_OPTIONS)
def _turns(a, b, c):
    """Return the roots of a + 2 b t + 3 c t**2 in (0, 1), rising; 2 stands for none."""
    first, second = 2.0, 2.0
    discriminant = b * b - 3.0 * c * a
    if discriminant > 0.0:
        w = -(b + (sqrt(discriminant) if b >= 0.0 else -sqrt(discriminant)))
        if c != 0.0:
            first = w / (3.0 * c)
        if w != 0.0:
            second = a / w
    elif c == 0.0 and b != 0.0:
        first = -0.5 * a / b
    if not (first > 0.0 and first < 1.0):
        first = 2.0
    if not (second > 0.0 and second < 1.0):
        second = 2.0
    return min(first, second), max(first, second)


@njit(**_OPTIONS)
def _segment(y, p, A, C, i, ds, dy):
    """Return (a, b, c) and (e, f, g) with y = y_i + a t + b t**2 + c t**3 and p = p_i + e t + f t**2 + g t**3.

    `dy` is added to the place of the last ray's successor, the first ray of a closed front.
    """
    j = i + 1
    if j == y.size:
        j = 0
    else:
        dy = 0.0
    rise, turn = y[j] + dy - y[i], p[j] - p[i]
    a, z = A[i] * ds, A[j] * ds
    e, w = C[i] * ds, C[j] * ds
    return a, 3.0 * rise - 2.0 * a - z, a + z - 2.0 * rise, e, 3.0 * turn - 2.0 * e - w, e + w - 2.0 * turn


@njit(**_OPTIONS)
def _along(p, a, b, c, e, f, g, t):
    """Return the integral of p dy from 0 to t on a segment: exact for the two cubics."""
    q0, q1 = p * a, e * a + 2.0 * p * b
    q2, q3 = f * a + 2.0 * e * b + 3.0 * p * c, g * a + 2.0 * f * b + 3.0 * e * c
    q4, q5 = 2.0 * g * b + 3.0 * f * c, 3.0 * g * c
    return t * (q0 + t * (q1 / 2 + t * (q2 / 3 + t * (q3 / 4 + t * (q4 / 5 + t * q5 / 6)))))


@njit(**_OPTIONS)
def _invert(target, yi, a, b, c, low, high, y_low, y_high):
    """Return t in [low, high] with y(t) = target on a monotone piece: Newton's rule kept inside a bracket."""
    sign = 1.0 if y_high > y_low else -1.0
    t = low + (high - low) * (target - y_low) / (y_high - y_low)
    for _ in range(60):
        value = yi - target + t * (a + t * (b + t * c))
        slope = a + t * (2.0 * b + 3.0 * t * c)
        if value * sign > 0.0:
            high = t
        else:
            low = t
        new = t - value / slope if slope != 0.0 else 0.5 * (low + high)
        if not (new > low and new < high):
            new = 0.5 * (low + high)
        step = abs(new - t)
        t = new
        if step < 1e-15:
            break
    return t


@njit(**_OPTIONS)
def land(y, p, action, A, C, amplitude, ds, closed, dy, start, pitch, low, high, at, values, branch, folds, gaps):
    """Find every branch at every point Y_m = start + (m + 1/2) pitch, low <= m < high.

    Parameters
    ----------
    y, p, action, A, C, amplitude : float64, shape (ray,)
        Rays at equal steps `ds` of the front parameter; A = dy/ds, C = dp/ds; amplitude**2 ds is the flux.
    closed : bool
        The last ray is followed by the first, with `dy` added to its place.
    at, values, branch, folds, gaps : arrays to be filled
        at (landing, 2) int64: m and the number of the branch, which starts at 0 and grows along the front;
        values (landing, 4): abs(dy/ds), action, momentum, amplitude there;
        branch (branch,) int64: the first ray on the branch, -1 if none; filled with -1 by the caller;
        folds (branch - 1, 7): what lies between a branch and the next: front parameter in units of ds, y, p,
        action, d2y/ds2, dp/ds, amplitude; nan where rays are missing, not folded; filled with nan by the caller;
        gaps (segment,): by how much the action gained from ray to ray differs from the integral of p dy.
        Arrays of length 0 are left alone: call once to count, once to fill.

    Returns
    -------
    landings, branches : int
    """
    rays = y.size
    segments = rays if closed else rays - 1
    fill = branch.size > 0
    found, number, way, torn = 0, 0, 0.0, False
    for i in range(segments):
        j = i + 1 if i + 1 < rays else 0
        end = y[j] + (dy if j == 0 else 0.0)
        if not (abs(y[i]) < FAR and abs(end) < FAR):
            torn = True
            continue
        a, b, c, e, f, g = _segment(y, p, A, C, i, ds, dy)
        first, second = _turns(a, b, c)
        gap = action[j] - action[i] - _along(p[i], a, b, c, e, f, g, 1.0)
        left, y_left = 0.0, y[i]
        while left < 1.0:
            right = 1.0
            if first > left and first < 1.0:
                right = first
            elif second > left and second < 1.0:
                right = second
            y_right = y[i] + right * (a + right * (b + right * c)) if right < 1.0 else end
            turned = (y_right - y_left) * way < 0.0 or torn
            if turned:
                number += 1
            if y_right != y_left:
                way = 1.0 if y_right > y_left else -1.0
            m0 = max(low, int(ceil((min(y_left, y_right) - start) / pitch - 0.5)))
            m1 = max(m0, min(high, int(ceil((max(y_left, y_right) - start) / pitch - 0.5))))
            if fill:
                if turned and not torn:
                    folds[number - 1, 0] = i + left
                    folds[number - 1, 1] = y_left
                    folds[number - 1, 2] = p[i] + left * (e + left * (f + left * g))
                    folds[number - 1, 3] = action[i] + _along(p[i], a, b, c, e, f, g, left) + left * gap
                    folds[number - 1, 4] = (2.0 * b + 6.0 * c * left) / ds**2
                    folds[number - 1, 5] = (e + left * (2.0 * f + 3.0 * g * left)) / ds
                    folds[number - 1, 6] = amplitude[i] + left * (amplitude[j] - amplitude[i])
                if left == 0.0 and branch[number] < 0:
                    branch[number] = i
                gaps[i] = gap
                for m in range(m0, m1):
                    t = _invert(start + (m + 0.5) * pitch, y[i], a, b, c, left, right, y_left, y_right)
                    here = found + m - m0
                    at[here, 0] = m
                    at[here, 1] = number
                    values[here, 0] = abs(a + t * (2.0 * b + 3.0 * t * c)) / ds
                    values[here, 1] = action[i] + _along(p[i], a, b, c, e, f, g, t) + t * gap
                    values[here, 2] = p[i] + t * (e + t * (f + t * g))
                    values[here, 3] = amplitude[i] + t * (amplitude[j] - amplitude[i])
            found += m1 - m0
            torn = False
            left, y_left = right, y_right
    return found, number + 1
