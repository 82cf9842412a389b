"""Loads and stores that let LLVM vectorise a loop which also looks things up in a table.

LLVM leaves such a loop scalar because a store to the state might change the table. These intrinsics tell it
otherwise: what `look_up` reads is never written by `put` inside the same kernel. They check no bounds.
"""

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
def get(typingctx, state, index):  # noqa: ARG001
    """Return state[index] of an array that `put` may write to."""
    signature = state.dtype(state, types.intp)

    def generate(context, builder, sig, args):
        value = builder.load(_address(context, builder, sig.args[0], *args))
        value.set_metadata("alias.scope", _scope(builder))
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
