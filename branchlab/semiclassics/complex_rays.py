"""The two rays of a fold on its dark side, where their places on the front are complex."""

import numpy as np

from branchlab.semiclassics.manifold import Manifold

FARTHEST = 4.3
"""How far the front is continued, in units of the distance of the outermost ray used."""


class ComplexRays:
    """Continuation of a front beyond its folds, from six rays around each.

    y and p are polynomials of degree 11 in the front parameter (values and tangents of the rays), the amplitude
    one of degree 5. The outermost rays are as far from the fold as the complex rays are where the Airy argument
    is 1/2, but not beyond the neighbouring folds.

    Parameters
    ----------
    manifold : Manifold
    folds : ndarray, shape (fold, 7)
        See `branchlab.kernels.branches.land`.
    k : float

    Attributes
    ----------
    width : ndarray, shape (fold,)
        Distance from the fold at which the Airy argument is 1, to first order.
    plain : ndarray, shape (fold,)
        (a0 + a1) z**(1/4) at the fold, to first order.
    """

    def __init__(self, manifold: Manifold, folds, k: float):
        m, self.k = manifold, k
        at, self.place, self.slope, self.path, self.curvature, self.turn, self.amplitude = folds.T
        bend = np.abs(self.curvature)
        self.width = 0.5 * bend * (0.5 * k * np.abs(self.turn) * bend) ** (-2.0 / 3.0)
        self.plain = 2.0 * self.amplitude * (0.5 * k * np.abs(self.turn) * bend) ** (1.0 / 6.0) / np.sqrt(bend)
        rays, i = m.y.size, np.floor(at).astype(np.int64)
        gap = np.diff(at, prepend=-np.inf, append=np.inf)
        far = np.sqrt(self.width / bend) / m.ds
        far = np.minimum(far, np.minimum(gap[:-1], gap[1:]))
        far = np.clip(np.rint(far), 2, max(rays // 8, 2)).astype(np.int64)
        # evenly spread: two neighbouring rays among distant ones would spoil the polynomial by round-off
        off = np.rint(far * np.array([[0.2], [0.6], [1.0]])).astype(np.int64)
        nodes = np.concatenate([(i - off)[::-1], i + 1 + off])
        if m.lap == 0.0:
            nodes += np.maximum(-nodes[0], 0) - np.maximum(nodes[-1] - rays + 1, 0)
        lap, wrapped = np.divmod(nodes, rays)
        self.unit = far * m.ds
        t = (nodes - at) / far
        powers = t[..., None] ** np.arange(12)
        slopes = np.arange(12) * t[..., None] ** np.maximum(np.arange(12) - 1, 0)
        matrix = np.concatenate([powers, slopes]).transpose(1, 0, 2)
        y = np.concatenate([m.y[wrapped] + lap * m.lap - self.place, m.A[wrapped] * self.unit])
        p = np.concatenate([m.p[wrapped] - self.slope, m.C[wrapped] * self.unit])
        both = np.linalg.solve(matrix, np.stack([y, p], axis=-1).transpose(1, 0, 2))
        size = np.linalg.solve(powers[..., :6].transpose(1, 0, 2), m.amplitude[wrapped].T[..., None])
        self.y, self.size = both[:, :, 0].T, size[:, :, 0].T
        self.dy = self.y[1:] * np.arange(1, 12)[:, None]
        self.dS = _product(both[:, :, 1].T, self.dy)  # of the action beyond that of the fold's direction

    def beyond(self, fold, offset):
        """Return what the uniform form needs at y = place + offset on the dark side.

        Parameters
        ----------
        fold : ndarray of int, shape (point,)
        offset : ndarray, shape (point,)

        Returns
        -------
        z, total, difference, path : ndarray, shape (point,)
            Minus the Airy argument; (a0 + a1) (-z)**(1/4) and (a0 - a1) (-z)**(-1/4), which are real; mean action.

        Where the continuation fails (the root is far, or unlike that of a plain fold: close to a cusp it runs into
        the other fold) the four are those of a plain fold.
        """
        # the ray with the higher Maslov index lies on the side where (dy/ds)(dp/ds) > 0
        way = np.sign(self.curvature * self.turn)[fold]
        start = np.sqrt(2.0 * np.abs(offset / self.curvature[fold])) / self.unit[fold]
        s = 1j * way * start
        y, dy = self.y[:, fold], self.dy[:, fold]
        for _ in range(8):
            slope = _value(dy, s)
            s = s - (_value(y, s) - offset) / np.where(slope == 0.0, 1.0, slope)
            s = np.where(np.abs(s) < 2.0 * FARTHEST, s, 2.0 * FARTHEST)  # lost: not good below
        slope = _value(dy, s) / self.unit[fold]
        steep = np.abs(slope) / np.maximum(np.abs(self.curvature[fold]) * start * self.unit[fold], 1e-300)
        power = np.arange(1, self.dS.shape[0] + 1)[:, None]
        action = s * _value(self.dS[:, fold] / power, s)
        z = (1.5 * self.k * np.abs(action.imag)) ** (2.0 / 3.0)
        size = _value(self.size[:, fold], s)
        local = np.abs(offset) / self.width[fold]
        good = (np.abs(_value(y, s) - offset) < 1e-6 * np.abs(offset)) & (s.imag * way > 0) & (np.abs(s) < FARTHEST)
        good &= (steep > 0.5) & (steep < 2.0) & (z > 0.5 * local) & (z < 2.0 * local)
        good &= np.abs(size) > 0.1 * np.abs(self.amplitude[fold])
        # a1 = size/(e dy/ds)**(1/2), e the sign of dy/ds on the lit side, continued by x**(1/2) -> i abs(x)**(1/2);
        # a0 is its conjugate up to the same factor
        spread = np.where(good, np.sign(self.turn[fold]) * slope / np.where(good, size, 1.0) ** 2, 1j)
        tilt = 0.5 * (np.angle(spread) - 0.5 * np.pi)
        scale, z = 2.0 / np.sqrt(np.abs(spread)), np.where(good, z, 1.0)
        total, difference = scale * np.cos(tilt) * z**0.25, scale * np.sin(tilt) * z**-0.25
        plain = self.plain[fold]
        good &= (total > 0.5 * plain) & (total < 2.0 * plain) & (np.abs(difference) < plain)
        path = self.path[fold] + self.slope[fold] * offset
        return (
            np.where(good, z, local),
            np.where(good, total, plain),
            np.where(good, difference, 0.0),
            np.where(good, path + action.real, path),
        )


def _value(polynomial, s):
    """Horner's rule; coefficients along the first axis, rising."""
    total = polynomial[-1] * np.ones_like(s)
    for row in polynomial[-2::-1]:
        total = total * s + row
    return total


def _product(a, b):
    """Return the coefficients of a product of polynomials."""
    total = np.zeros((a.shape[0] + b.shape[0] - 1, a.shape[1]))
    for power, row in enumerate(b):
        total[power : power + a.shape[0]] += a * row
    return total
