"""In-medium sweeps: an approximate inverse of the damped operator, by waves that march one way."""

import functools
import math

import numpy as np
import scipy.fft

from branchlab.kernels.sweeps import (
    add_turned,
    begin_rows,
    scatter_rows,
    source_rows,
    split_columns,
    sweep_rows,
    transform_rows,
    turn_columns,
)
from branchlab.waves.full_operator import REALS
from branchlab.waves.team import THREADS, shares

STEEPEST = 0.8  # sine of the angle up to which the rank-1 correction is fitted
GRAZING = 0.85  # sine of the angle from which waves are damped smoothly: they belong to the sweeps across
GRAZING_LOSS = 0.2  # amplitude lost per k h there, at the most
SOFT_POLE = 1e-3  # imaginary part of p**2/k**2 that keeps h/(2 i p) finite at grazing
SELF_SHARE = 0.85  # share of the lattice sum's own point that the sweeps leave out
CLIP = 0.6  # v beyond this is not followed by the amplitude factor and the correction
LARGEST_RMS = 0.2  # that the correction is fitted to
MOST_TURNS = 12  # of waves along y round periodic sides, in one go
TURNOVER = 0.456, 0.544  # smoothstep from x- to y-sweeps in abs(qy)/(abs(qx) + abs(qy)): 40 to 50 degrees


class _Lines:
    """Tables for the march along one direction of a grid, up and down; rows are what it marches over."""

    def __init__(self, operator, v, loss_rows, loss, h: float, q, phase: float, rms: float):
        k, dtype = operator.grid.k, operator.dtype
        real = REALS[dtype]
        n = q.size
        self.team, self.native = operator.team, operator.native
        sine = np.abs(q) / k
        p = np.sqrt(k**2 - q**2 + 0j)
        edge = np.clip((sine - GRAZING) / (1.0 - GRAZING), 0.0, 1.0)
        step = np.exp(1j * p * h - GRAZING_LOSS * k * h * edge**2)
        # of a Bloch envelope, waves up and waves down turn differently
        self.steps = [(step * np.exp(turn) / n).astype(dtype) for turn in (-1j * phase, 1j * phase)]
        self.weight = h / (2j * np.sqrt(p**2 + 1j * SOFT_POLE * k**2))
        turn = min(k * h, 2.9)
        self.own = SELF_SHARE * (1.0 - turn / np.tan(turn)) / (4.0 * k**2)
        curve, sines, bends = _rank_one(k, h, rms)
        bend = np.interp(sine, sines, bends.real) + 1j * np.interp(sine, sines, bends.imag)
        self.bend, self.curve = bend.astype(dtype), np.array([curve], real)
        self.gain = np.array([1.0, 0.25, 5.0 / 32.0], real)
        self.shape = np.clip(v, -CLIP, CLIP) if np.abs(v).max() > CLIP else v
        self.screen = np.empty(v.shape, dtype)

        def fill(thread):
            for row in range(*shares(v.shape[0])[thread]):
                index = np.sqrt(1.0 - v[row] + 1j * (loss_rows[row] + loss))
                self.screen[row] = np.exp((-0.5j * k * h) * (1.0 - index))

        self.team.run(fill)
        self.halves = shares(v.shape[0], 2)
        if self.native:
            self.plan, self.pair_plan = operator.plan(1, n), operator.plan(2, n)
            self.pairs = [self.pair_plan.empty() for _ in range(THREADS)]
        else:
            self.pairs = [np.empty((2, n), dtype) for _ in range(THREADS)]

    def run(self, out, q, prepare, turns: int = 1) -> None:
        """Add the waves that go up and down from the source q to `out`.

        One direction on each thread: each begins in its half of the rows and ends in the other's.

        Parameters
        ----------
        out, q : ndarrays, shape (rows, n)
        prepare : callable
            prepare(thread, begin, end) makes these rows of q and of `out` as they are without waves.
        turns : int
            How often to go round a periodic box; only the last turn is kept.
        """
        for pair in self.pairs:
            pair[...] = 0.0
        for visit in range(2 * turns):

            def march(direction, visit=visit):
                begin, end = self.halves[(direction + visit) % 2]
                if visit % 2 == 0:
                    prepare(direction, begin, end)
                self._march(out, q, direction, begin, end)

            self.team.run(march)

    def _march(self, out, q, direction: int, begin: int, end: int) -> None:
        """March up (direction 0) or down (1) over some rows."""
        tables = self.shape, self.gain, self.screen, self.steps[direction], self.bend, self.curve
        pair = self.pairs[direction]
        if self.native:
            singles, pairs = ((plan.forward, plan.inverse) for plan in (self.plan, self.pair_plan))
            sweep_rows(out, q, *tables, begin, end, bool(direction), pair, self.plan.address, singles, pairs)
        else:
            _plain_sweep(out, q, *tables, begin, end, bool(direction), pair)


def _plain_sweep(out, q, shape, gain, screen, step, bend, curve, begin, end, backward, pair) -> None:
    """Do what `kernels.sweeps.sweep_rows` does, through scipy.fft."""
    for m, row in enumerate(range(end - 1, begin - 1, -1) if backward else range(begin, end)):
        v, s = shape[row], screen[row]
        f = gain[0] + v * (gain[1] + gain[2] * v)
        fields = scipy.fft.ifft(pair[: 1 + m % 2], norm="forward")
        wave = (fields[0] + (v + curve * v * v) * fields[1]) * s if m % 2 else fields[0] * s
        out[row] += wave * f
        wave = (wave + q[row] * f) * s
        if m % 2:
            pair[0] = step * scipy.fft.fft(wave)
        else:
            plain, turned = scipy.fft.fft(np.array([wave, (v + curve * v * v) * wave]))
            pair[0] = step * (plain + bend * turned)
            pair[1] = bend * pair[0]


@functools.lru_cache(maxsize=64)
def _rank_one(k: float, h: float, rms: float):
    """Fit exp(i k h [(b - c) + (1 - sqrt(1 - v))]) - 1 by (v + curve v**2) bend(sine), b = sqrt(1 - v - sine**2).

    c = sqrt(1 - sine**2): what a step at an angle picks up in a medium beyond the product of free step and screen. The
    best factor of rank one over v, weighted by a Gaussian of 1.5 rms, is its first singular vector.

    Returns
    -------
    curve : float
    sine, bend : ndarrays
        The factor in Fourier space; it is smooth, and a grid has many wavenumbers.
    """
    v, sine = np.linspace(-3.0 * rms, 3.0 * rms, 61)[:, None], np.linspace(0.0, STEEPEST, 120)
    b, c = np.sqrt(1.0 - v - sine**2 + 0j), np.sqrt(1.0 - sine**2)
    turn = np.exp(1j * k * h * (b - c + 1.0 - np.sqrt(1.0 - v)))
    weight = np.exp(-0.5 * (v / (1.5 * rms)) ** 2)
    excess = (np.where(np.abs(turn) > 1.0, turn / np.abs(turn), turn) - 1.0) * weight
    first = np.linalg.svd(excess, full_matrices=False)[0][:, 0]
    linear, square = np.linalg.lstsq(np.hstack([v, v**2]) * weight, first, rcond=None)[0]
    curve = float((square / linear).real)
    profile = ((v + curve * v**2) * weight)[:, 0]
    return curve, sine, profile @ excess / (profile @ profile)


class Sweeps:
    """M r = r + G_v[V r], with G_v from one march up and one down in x, and in y too once `widen` is called.

    Waves near grazing to x are those that the marches along x cannot serve; marches along y take them over.

    Parameters
    ----------
    operator : DampedOperator
    rms : float
        Of v in the window.
    """

    def __init__(self, operator, rms: float):
        grid = operator.grid
        self.operator, self.rms = operator, min(max(rms, 1e-3), LARGEST_RMS)
        self.wide = False
        self.along = _Lines(operator, operator.v, grid.loss_x, grid.loss_y, grid.pitch[0], grid.qy, 0.0, self.rms)
        real = REALS[operator.dtype]
        self.numbers = np.array([grid.k**2, self.along.own], real)
        self.weight = (self.along.weight / grid.qy.size).astype(operator.dtype)
        self.q = operator.empty()

    def widen(self) -> None:
        """Add the marches along y."""
        operator, grid = self.operator, self.operator.grid
        real = REALS[operator.dtype]
        turned = np.ascontiguousarray(operator.v.T)
        phase = grid.bloch * grid.pitch[1]
        self.across = _Lines(operator, turned, grid.loss_y, grid.loss_x, grid.pitch[1], grid.qx, phase, self.rms)
        low, high = TURNOVER
        self.edges = np.array([low, 1.0 / (high - low), 1e-20, 0.0, 1.0, 2.0], real)
        self.sizes = np.abs(grid.qx).astype(real), np.abs(grid.qy).astype(real)
        count = operator.v.size
        self.weights = tuple((one.weight / count).astype(operator.dtype) for one in (self.along, self.across))
        self.q_spectrum = operator.empty()
        self.q_turned, self.out_turned = (np.empty(turned.shape, operator.dtype) for _ in range(2))
        # waves along y go round periodic sides about this often before they have left along x
        self.turns = 1 if grid.pad_y else min(MOST_TURNS, 2 + math.ceil(2.0 * grid.span[0] / grid.span[1]))
        self.wide = True

    def apply(self, out, residual) -> None:
        """Set `out` to M residual."""
        if self.wide:
            self._apply_wide(out, residual)
            return
        op = self.operator
        tables = op.v, op.damp_x, op.damp_y, self.numbers

        def prepare(thread, begin, end):
            if op.native:
                plan = op.row_plan
                ways = plan.address, (plan.forward, plan.inverse)
                room = op.row_room[thread]
                source_rows(self.q, out, residual, *tables, self.weight, begin, end, room, *ways)
            else:
                source = self._potential(begin, end) * residual[begin:end]
                self.q[begin:end] = scipy.fft.ifft(self.along.weight.astype(op.dtype) * scipy.fft.fft(source))
                out[begin:end] = residual[begin:end] + self.numbers[1] * source + self.q[begin:end]

        self.along.run(out, self.q, prepare)

    def _potential(self, begin: int, end: int) -> np.ndarray:
        op = self.operator
        damp = op.damp_x[begin:end, None] + op.damp_y
        return (self.numbers[0] * (op.v[begin:end] + 1j * damp)).astype(op.dtype)

    def _apply_wide(self, out, residual) -> None:
        op, team = self.operator, self.operator.team
        tables = op.v, op.damp_x, op.damp_y
        if op.native:
            rows, columns = op.row_plan, op.column_plan
            room, tall = op.row_room, op.column_room
            ahead = rows.address, rows.forward
            back = rows.address, rows.inverse
            both = columns.address, (columns.forward, columns.inverse)
            tail = columns.address, columns.inverse
            split = self.edges, *self.weights
            team.run(lambda t: scatter_rows(self.q, residual, *tables, op.strength, *op.rows[t], room[t], *ahead))
            team.run(
                lambda t: split_columns(self.q, self.q_spectrum, *self.sizes, *split, *op.columns[t], tall[t], *both)
            )
            team.run(lambda t: transform_rows(self.q_spectrum, *op.rows[t], room[t], *back))
            team.run(lambda t: turn_columns(self.q_turned, self.q_spectrum, *op.columns[t], tall[t], *tail))
        else:
            self._plain_split(residual)

        def prepare(thread, begin, end):
            if op.native:
                begin_rows(out, residual, self.q, *tables, self.numbers, begin, end, room[thread], *back)
            else:
                source = self._potential(begin, end) * residual[begin:end]
                out[begin:end] = residual[begin:end] + self.numbers[1] * source + self.q[begin:end]

        def prepare_turned(thread, begin, end):  # noqa: ARG001  (called with a thread like the other)
            self.out_turned[begin:end] = self.q_turned[begin:end]

        self.along.run(out, self.q, prepare)
        self.across.run(self.out_turned, self.q_turned, prepare_turned, turns=self.turns)
        team.run(lambda t: add_turned(out, self.out_turned, *op.rows[t]))

    def _plain_split(self, residual) -> None:
        """Do what the compiled passes do, through scipy.fft."""
        op = self.operator
        spectrum = scipy.fft.fft2(self._potential(0, op.v.shape[0]) * residual, workers=THREADS)
        low, rise = self.edges[:2]
        ax, ay = self.sizes[0][:, None], self.sizes[1]
        u = np.clip((ay / (ax + ay + self.edges[2]) - low) * rise, 0.0, 1.0).astype(op.v.dtype)
        share = u * u * (3.0 - 2.0 * u)
        dtype = op.dtype
        along = spectrum * ((1.0 - share) * self.along.weight.astype(dtype))
        self.q[...] = scipy.fft.ifft2(along, workers=THREADS)
        across = spectrum * (share * self.across.weight.astype(dtype)[:, None])
        self.q_turned[...] = scipy.fft.ifft2(across, workers=THREADS).T
