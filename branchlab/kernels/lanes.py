"""Loads and stores that let LLVM vectorise a loop which also looks things up in a table.

LLVM leaves such a loop scalar because a store to the state might change the table. These intrinsics tell it
otherwise: what `look_up` reads is never written by `put` inside the same kernel. They check no bounds.
"""

from llvmlite import ir
from numba.core import types
from numba.extending import intrinsic
from numba.np.arrayobj import make_array


def _scope(builder):
    """Return the metadata list that names the alias scope of the state arrays."""
    module = builder.module
    domain = module.add_metadata(["branchlab.lanes"])
    scope = module.add_metadata(["branchlab.lanes.state", domain])
    return module.add_metadata([scope])


def _address(context, builder, array_type, array, index):
    """Return the address of an element of a contiguous array."""
    data = make_array(array_type)(context, builder, array).data
    return builder.gep(data, [index], inbounds=True)


@intrinsic
def look_up(typingctx, table, index):  # noqa: ARG001  (numba passes its typing context)
    """Return table[index] of an array that no `put` of the kernel writes to."""
    signature = table.dtype(table, types.intp)

    def generate(context, builder, sig, args):
        value = builder.load(_address(context, builder, sig.args[0], *args))
        value.set_metadata("noalias", _scope(builder))
        return value

    return signature, generate


@intrinsic
def put(typingctx, state, index, value):  # noqa: ARG001
    """Set state[index] = value."""
    signature = types.void(state, types.intp, state.dtype)

    def generate(context, builder, sig, args):
        array, at, number = args
        store = builder.store(number, _address(context, builder, sig.args[0], array, at))
        store.set_metadata("alias.scope", _scope(builder))
        return context.get_dummy_value()

    return signature, generate


_DOUBLE, _LANES = ir.DoubleType(), ir.VectorType(ir.DoubleType(), 8)


def _eight(context, builder, array_type, array, index):
    """Return the address of eight neighbouring elements, as a vector."""
    return builder.bitcast(_address(context, builder, array_type, array, index), _LANES.as_pointer())


def _spread(builder, number):
    """Return a vector of eight copies of a number."""
    word, empty = ir.IntType(32), ir.Constant(_LANES, ir.Undefined)
    first = builder.insert_element(empty, number, ir.Constant(word, 0))
    return builder.shuffle_vector(first, empty, ir.Constant(ir.VectorType(word, 8), [0] * 8))


@intrinsic
def add_block(typingctx, out, real, imag, envelope, at, powers, cr, ci):  # noqa: ARG001
    """Add envelope[at + l] (cr + i ci) (powers[l] + i powers[8 + l]), l = 0..7, to eight complex numbers.

    The real parts are out[real + l], the imaginary parts out[imag + l]. One vector operation per line of the
    formula: left to itself LLVM unrolls the eight lanes and keeps them scalar.
    """
    signature = types.void(out, types.intp, types.intp, envelope, types.intp, powers, types.float64, types.float64)

    def generate(context, builder, sig, args):
        kinds = sig.args
        word, flags = ir.IntType(64), ("contract",)
        into_real = _eight(context, builder, kinds[0], args[0], args[1])
        into_imag = _eight(context, builder, kinds[0], args[0], args[2])
        weight = builder.load(_eight(context, builder, kinds[3], args[3], args[4]), align=8)
        zr = builder.load(_eight(context, builder, kinds[5], args[5], ir.Constant(word, 0)), align=8)
        zi = builder.load(_eight(context, builder, kinds[5], args[5], ir.Constant(word, 8)), align=8)
        c, s = _spread(builder, args[6]), _spread(builder, args[7])

        def times(a, b):
            return builder.fmul(a, b, flags=flags)

        real = builder.fsub(times(c, zr), times(s, zi), flags=flags)
        imag = builder.fadd(times(c, zi), times(s, zr), flags=flags)
        for place, part in ((into_real, real), (into_imag, imag)):
            total = builder.fadd(builder.load(place, align=8), times(weight, part), flags=flags)
            builder.store(total, place, align=8)
        return context.get_dummy_value()

    return signature, generate
