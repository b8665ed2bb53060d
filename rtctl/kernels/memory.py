"""Memory shared between compiled functions, processes and threads: blocks by address, calls by address, atomic words.

A block is one record of a fixed layout (`rtctl.blocks`, `rtctl.kernels.layout`). Compiled functions hand blocks to C function
pointers by address, so that the loop is compiled once for all arms and control laws.
"""

from typing import Any

import llvmlite.ir as ir
from numba.core import cgutils, types
from numba.extending import intrinsic

__all__ = [
    "address_of",
    "array_at",
    "atomic_add",
    "atomic_exchange",
    "atomic_fence",
    "atomic_load",
    "atomic_store",
    "block_at",
    "call_address",
]

_WORD = ir.IntType(64)


@intrinsic
def address_of(typingctx: Any, block: Any) -> Any:
    """Address of a record."""
    if not isinstance(block, types.Record):
        return None

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.ptrtoint(args[0], _WORD)

    return types.int64(block), generate


@intrinsic
def block_at(typingctx: Any, address: Any, layout: Any) -> Any:
    """The record of dtype `layout` at an address. Nothing is copied or checked."""
    if not isinstance(layout, types.DType):
        return None
    record = layout.dtype

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.inttoptr(args[0], context.get_value_type(record))

    return record(types.int64, layout), generate


def _array_at(element: Any, context: Any, builder: Any, address: Any, count: Any) -> Any:
    array_type = types.Array(element, 1, "C")
    array = context.make_array(array_type)(context, builder)
    pointer = builder.inttoptr(address, context.get_data_type(element).as_pointer())
    size = context.get_abi_sizeof(context.get_data_type(element))
    context.populate_array(
        array,
        data=pointer,
        shape=cgutils.pack_array(builder, [count]),
        strides=cgutils.pack_array(builder, [context.get_constant(types.intp, size)]),
        itemsize=context.get_constant(types.intp, size),
        meminfo=None,
    )
    return array._getvalue()


@intrinsic
def array_at(typingctx: Any, address: Any, count: Any, element: Any) -> Any:
    """`count` elements of dtype `element` at an address, as an array. Nothing is copied or checked."""
    if not isinstance(element, (types.DType, types.NumberClass)):
        return None

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return _array_at(element.dtype, context, builder, args[0], args[1])

    return types.Array(element.dtype, 1, "C")(types.int64, types.intp, element), generate


@intrinsic
def call_address(typingctx: Any, address: Any, arguments: Any) -> Any:
    """Call the C function `int64 f(void *, ...)` at an address with a tuple of addresses."""
    if not isinstance(arguments, types.BaseTuple):
        return None
    count = len(arguments)

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        function = ir.FunctionType(_WORD, [_WORD] * count)
        pointer = builder.inttoptr(args[0], function.as_pointer())
        words = [
            context.cast(builder, builder.extract_value(args[1], i), signature.args[1][i], types.int64) for i in range(count)
        ]
        return builder.call(pointer, words)

    return types.int64(types.int64, arguments), generate


def _pointer(builder: Any, address: Any) -> Any:
    return builder.inttoptr(address, _WORD.as_pointer())


@intrinsic
def atomic_load(typingctx: Any, address: Any) -> Any:
    """Read the 64-bit word at an address; later reads are not moved before it (acquire)."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.load_atomic(_pointer(builder, args[0]), "acquire", 8)

    return types.int64(types.int64), generate


@intrinsic
def atomic_store(typingctx: Any, address: Any, value: Any) -> Any:
    """Write the 64-bit word at an address; earlier writes are not moved after it (release)."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        builder.store_atomic(args[1], _pointer(builder, args[0]), "release", 8)
        return context.get_dummy_value()

    return types.void(types.int64, types.int64), generate


@intrinsic
def atomic_fence(typingctx: Any) -> Any:
    """Later writes are not moved before earlier reads and writes (release fence): marks a block before its words change."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        builder.fence("release")
        return context.get_dummy_value()

    return types.void(), generate


def _rmw(operation: str) -> Any:
    def typed(typingctx: Any, address: Any, value: Any) -> Any:
        def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
            return builder.atomic_rmw(operation, _pointer(builder, args[0]), args[1], "seq_cst")

        return types.int64(types.int64, types.int64), generate

    return typed


atomic_exchange = intrinsic(_rmw("xchg"))
atomic_add = intrinsic(_rmw("add"))
