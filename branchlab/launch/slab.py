"""The medium as the full wave and full rays meet it: a slab with a face that a wave can enter."""

import numpy as np

from branchlab.launch.plane import Plane
from branchlab.launch.setup import Setup
from branchlab.launch.window import smooth_step

FACE_SCALES = 1.0


class Slab(Plane):
    """The plane of a setup with its entry face centred on x = 0.

    The paraxial model starts inside the medium. A wave that comes from outside meets a face, which must be smooth for
    a spectral solver and for rays: v rises from the mean to the medium's own over `face`, half of it before x = 0 and
    half behind, so that what the face adds before x = 0 it takes behind, and rays leave it as they leave a sharp face,
    to second order in its thickness. At the exit the fade of `Plane` follows the last screen.

    Parameters
    ----------
    setup : Setup

    Attributes
    ----------
    face : float
        Thickness of the entry face, one medium scale or less; the field at x < -face/2 is in the mean medium.
    """

    def __init__(self, setup: Setup):
        super().__init__(setup)
        self.face = min(FACE_SCALES * min(setup.medium.scale, 0.25 * setup.length), self.fade)

    @property
    def finest(self) -> float:
        """Length whose eighth resolves the medium, the fades and the face."""
        return min(super().finest, 0.5 * self.face)

    def present(self, x) -> np.ndarray:
        """Return how much of the medium is there at x: a half at x = 0, 1 behind the face, 0 beyond the exit's fade."""
        return smooth_step(x / self.face + 0.5) * (1.0 - smooth_step((x - self.setup.length) / self.fade))
