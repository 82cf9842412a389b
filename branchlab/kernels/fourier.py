"""The one door to fast Fourier transforms: planned FFTW where pyfftw is installed, scipy.fft everywhere.

Both give the same answer to round-off. The environment variable BRANCHLAB_FFT=scipy closes the first way.
"""

import os

import numpy as np
import scipy.fft

try:
    import pyfftw
except ImportError:
    pyfftw = None


def planned() -> bool:
    """Return whether transforms are planned FFTW ones."""
    return pyfftw is not None and os.environ.get("BRANCHLAB_FFT", "") != "scipy"


class RowBlock:
    """A block of complex rows with in-place transforms along the rows, on one thread.

    Several blocks may be worked on by several Python threads: transforms release the interpreter.

    Parameters
    ----------
    rows, n : int
    dtype : {complex128, complex64}

    Attributes
    ----------
    data : ndarray, shape (rows, n)
        Aligned; set it and read it, do not replace it.
    """

    def __init__(self, rows: int, n: int, dtype=np.complex128):
        if planned():
            self.data = pyfftw.empty_aligned((rows, n), dtype=dtype)
            plan = {"axes": (1,), "flags": ("FFTW_MEASURE",), "threads": 1}
            self._forward = pyfftw.FFTW(self.data, self.data, direction="FFTW_FORWARD", **plan)
            self._inverse = pyfftw.FFTW(self.data, self.data, direction="FFTW_BACKWARD", normalise_idft=False, **plan)
        else:
            self.data = np.empty((rows, n), dtype=dtype)
            self._forward = self._inverse = None

    def forward(self) -> None:
        """Transform the rows, sum u exp(-iqy), in place."""
        if self._forward:
            self._forward.execute()
        else:
            self.data[...] = scipy.fft.fft(self.data, axis=1, overwrite_x=True)

    def inverse(self) -> None:
        """Transform the rows back without dividing by n, in place."""
        if self._inverse:
            self._inverse.execute()
        else:
            self.data[...] = scipy.fft.ifft(self.data, axis=1, norm="forward", overwrite_x=True)


def wavenumbers(n: int, span: float) -> np.ndarray:
    """Return the angular wavenumbers of a periodic row of n points, in the transform's order."""
    return 2.0 * np.pi * np.fft.fftfreq(n, span / n)


def periodic_derivative(rows, span: float, order: int = 1) -> np.ndarray:
    """Return a derivative of real periodic rows, spectrally.

    Parameters
    ----------
    rows : ndarray, shape (..., n)
        Equidistant values over one period.
    span : float
        The period.
    order : int
    """
    n = rows.shape[-1]
    factor = (1j * wavenumbers(n, span)[: n // 2 + 1]) ** order
    if n % 2 == 0 and order % 2 == 1:
        factor[-1] = 0.0  # the derivative of the highest cosine vanishes on the points
    return scipy.fft.irfft(factor * scipy.fft.rfft(rows, axis=-1), n=n, axis=-1)


def resampled(rows, n: int) -> np.ndarray:
    """Return real periodic rows on n points instead, by their Fourier series.

    Both sets of points are the centres of equal cells that fill the period. Exact for rows whose spectrum ends
    before that of the coarser set.

    Parameters
    ----------
    rows : ndarray, shape (..., m)
    n : int
        At least m.
    """
    m = rows.shape[-1]
    if n == m:
        return rows
    spectrum = scipy.fft.rfft(rows, axis=-1)
    if m % 2 == 0:
        spectrum[..., -1] *= 0.5  # the highest cosine of an even set is two halves on a finer one
    spectrum *= np.exp(1j * np.pi * np.arange(spectrum.shape[-1]) * (1.0 / n - 1.0 / m))
    return scipy.fft.irfft(spectrum, n=n, axis=-1) * (n / m)
