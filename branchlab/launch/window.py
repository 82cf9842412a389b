"""The periodic box in y in which rays and waves march: the medium made smooth and exactly periodic there."""

import attrs
import numpy as np

from branchlab.media.base import Medium


def smooth_step(t):
    """Rise from 0 at t <= 0 to 1 at t >= 1 with four continuous derivatives (degree-9 polynomial)."""
    t = np.clip(t, 0.0, 1.0)
    return t**5 * (126.0 - t * (420.0 - t * (540.0 - t * (315.0 - 70.0 * t))))


@attrs.frozen(slots=False, eq=False)
class Window:
    """The box of one setup.

    With periodic sides the box is the width. Unless the medium itself repeats after the width, its last
    `fade` on the upper side is cross-faded into what lies one width below (cos/sin weights on v - mean:
    the variance of a random medium is kept), so that v is smooth across the seam.
    With absorbing sides the box is the width and a pad on either side; v is left alone inside the width and
    led to its mean over the first `fade` of the pad, where the absorber of the wave lies.

    Attributes
    ----------
    medium : Medium
    width : float
        Transverse width of the setup.
    pad : float
        Thickness of the absorbing pad on either side; 0 for periodic sides.
    fade : float
        Length of the seam or of the taper; 0 if the medium repeats after the width by itself.
    """

    medium: Medium
    width: float
    pad: float
    fade: float

    @property
    def span(self) -> float:
        """Period of the box."""
        return self.width + 2.0 * self.pad

    @property
    def start(self) -> float:
        """Lower edge of the box."""
        return -0.5 * self.span

    @property
    def reach(self) -> tuple[float, float]:
        """Lowest and highest y at which the medium is evaluated."""
        if self.pad:
            return -0.5 * self.width - self.fade, 0.5 * self.width + self.fade
        return -0.5 * self.width - self.fade, 0.5 * self.width

    def points(self, n: int) -> np.ndarray:
        """Return n equidistant points, the centres of n cells that fill the box."""
        return self.start + (np.arange(n) + 0.5) * (self.span / n)

    def rows(self, x, n: int, *, dx: int = 0) -> np.ndarray:
        """Return v (dx=0) or its x-derivative (dx=1) at x and the n points of the box, shape (x, n).

        Periodic in y and smooth across the ends of the box; take y-derivatives spectrally from these rows,
        so that rays and wave see derivatives of one function.
        """
        x, y = np.asarray(x, dtype=np.float64), self.points(n)
        mean = 0.0 if dx else self.medium.mean
        if not self.pad:
            v = self.medium.rows(x, y, dx=dx)
            if self.fade:
                seam = y > 0.5 * self.width - self.fade
                turn = 0.5 * np.pi * smooth_step((y[seam] - 0.5 * self.width) / self.fade + 1.0)
                partner = self.medium.rows(x, y[seam] - self.width, dx=dx)
                v[:, seam] = mean + np.cos(turn) * (v[:, seam] - mean) + np.sin(turn) * (partner - mean)
            return v
        beyond = (np.abs(y) - 0.5 * self.width) / self.fade
        v = np.full((x.size, n), mean)
        inside = beyond < 1.0
        share = 1.0 - smooth_step(beyond[inside])
        v[:, inside] += share * (self.medium.rows(x, y[inside], dx=dx) - mean)
        return v

    def absorber(self, y) -> np.ndarray:
        """Return the shape of the absorber, 0 inside the width and rising smoothly to 1 at the box's ends."""
        if not self.pad:
            return np.zeros(np.shape(y))
        return smooth_step((np.abs(y) - 0.5 * self.width) / self.pad)
