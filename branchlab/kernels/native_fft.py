"""Planned FFTW transforms that compiled loops call themselves, without going back to Python in between.

Two Python threads that share the interpreter between short transforms spend more time waiting for it than
transforming. A plan is a whole number here, made once, and `transform` calls FFTW's new-array execution
(FFTW manual, 4.6) through its address; compiled code stays valid on disk, for no address is built into it.
Where the library cannot be found that way, `available` says so, and `kernels.fourier.RowBlock` does the same work.
"""

import ctypes
import functools

import numpy as np
from llvmlite import ir
from numba.core import types
from numba.extending import intrinsic

from branchlab.kernels.fourier import planned, pyfftw

_NAMES = {np.dtype(np.complex128): "fftw", np.dtype(np.complex64): "fftwf"}
_FORWARD, _INVERSE, _MEASURE, _ESTIMATE = -1, 1, 0, 64


@functools.cache
def _library():
    """Return the FFTW that pyfftw itself is linked with, or None."""
    try:
        library = ctypes.CDLL(pyfftw.pyfftw.__file__)  # looks names up in what the module depends on, too
        for name in _NAMES.values():
            getattr(library, f"{name}_plan_many_dft"), getattr(library, f"{name}_execute_dft")
    except (AttributeError, OSError):
        return None
    return library


def available() -> bool:
    """Return whether compiled loops can call planned transforms."""
    return planned() and _library() is not None


class _Plans:
    """Both directions of one kind of transform, and what destroys them."""

    def __init__(self, rows: int, n: int, dtype, flag: int):
        name, library = _NAMES[dtype], _library()
        make = getattr(library, f"{name}_plan_many_dft")
        make.restype = ctypes.c_void_p
        whole, address = ctypes.c_int, ctypes.c_void_p
        layout = [address, address, whole, whole]
        make.argtypes = [whole, ctypes.POINTER(whole), whole, *layout, *layout, whole, ctypes.c_uint]
        if serial := getattr(library, f"{name}_plan_with_nthreads", None):
            serial(1)  # the number is FFTW's own global state; a plan made under another would start threads
        data, size = pyfftw.empty_aligned((rows, n), dtype=dtype, n=64), (whole * 1)(n)
        rows_of = (data.ctypes.data, None, 1, n)
        self.forward, self.inverse = (
            make(1, size, rows, *rows_of, *rows_of, sign, flag) for sign in (_FORWARD, _INVERSE)
        )
        self._destroy = getattr(library, f"{name}_destroy_plan")
        self._destroy.argtypes = [address]
        self.address = ctypes.cast(getattr(library, f"{name}_execute_dft"), address).value

    def __del__(self):
        for plan in (getattr(self, "forward", None), getattr(self, "inverse", None)):
            if plan and hasattr(self, "_destroy"):
                self._destroy(plan)


_plans = functools.lru_cache(maxsize=256)(
    _Plans
)  # measuring takes a second for long rows; realisations share their sizes


class NativePlan:
    """In-place transforms of a block of complex rows, for `transform`.

    Parameters
    ----------
    rows, n : int
    dtype : {complex128, complex64}
    measured : bool
        Try many ways and take the fastest: a second or two for a new n of thousands, and a third less time later on.

    Attributes
    ----------
    address, forward, inverse : int
        Of the executing function and the two plans; neither direction divides by n.
    """

    def __init__(self, rows: int, n: int, dtype=np.complex128, *, measured: bool = True):
        self.shape, self.dtype = (rows, n), np.dtype(dtype)
        self._plans = _plans(rows, n, self.dtype, _MEASURE if measured else _ESTIMATE)  # kept alive
        self.address, self.forward, self.inverse = self._plans.address, self._plans.forward, self._plans.inverse

    def empty(self) -> np.ndarray:
        """Return a block with the alignment that the plans ask for."""
        return pyfftw.empty_aligned(self.shape, dtype=self.dtype, n=64)


@intrinsic
def transform(typingctx, address, plan, data):  # noqa: ARG001  (numba passes its typing context)
    """Transform a block in place: address and plan of a `NativePlan`, data the address of a block it gave."""
    signature = types.void(types.intp, types.intp, types.intp)

    def generate(context, builder, sig, args):  # noqa: ARG001
        pointer = ir.IntType(8).as_pointer()
        kind = ir.FunctionType(ir.VoidType(), [pointer] * 3)
        function = builder.inttoptr(args[0], kind.as_pointer())
        plan_pointer, block = (builder.inttoptr(number, pointer) for number in args[1:])
        builder.call(function, [plan_pointer, block, block])
        return context.get_dummy_value()

    return signature, generate
