"""How the audio thread and the rest of the program hand things over: words and views in shared memory.

A word is an int64 that one side writes with release and the other reads with acquire, so that whatever was
written before the word is seen by whoever reads it (the memory orders of C11, ISO/IEC 9899:2011, 7.17.3). No
side ever waits. Each word has a cache line to itself.

A view is an array over memory that Python owns, made from its address inside compiled code, where no Python
object can be had. Whoever passes an address keeps the memory alive.
"""

from typing import TYPE_CHECKING, Any

import numba
import numpy as np
from numba import types
from numba.core import cgutils
from numba.extending import intrinsic
from numba.np.arrayobj import make_array, populate_array

from glidesmith.compiled import kernel

if TYPE_CHECKING:
    from numpy.typing import NDArray

_STRIDE = 8
_WORD_BYTES = 8


def make_words(count: int) -> "NDArray[np.int64]":
    """Room for ``count`` words, all 0."""
    return np.zeros(count * _STRIDE, np.int64)


def _pointer(context: Any, builder: Any, signature: Any, words: Any, index: Any) -> Any:
    array = context.make_array(signature.args[0])(context, builder, words)
    place = builder.mul(index, context.get_constant(types.int64, _STRIDE))
    return builder.gep(array.data, [place])


@intrinsic  # type: ignore[untyped-decorator]
def load_acquire(typing_context: Any, words: Any, index: Any) -> Any:
    """Word ``index`` of ``words``; what its writer wrote before it is seen from here on."""

    def build(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        pointer = _pointer(context, builder, signature, *arguments)
        return builder.load_atomic(pointer, "acquire", _WORD_BYTES)

    return types.int64(words, types.int64), build


@intrinsic  # type: ignore[untyped-decorator]
def store_release(typing_context: Any, words: Any, index: Any, value: Any) -> Any:
    """Set word ``index`` of ``words``; what was written before it is seen by whoever reads it."""

    def build(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        words, index, value = arguments
        pointer = _pointer(context, builder, signature, words, index)
        builder.store_atomic(value, pointer, "release", _WORD_BYTES)
        return context.get_dummy_value()

    return types.void(words, types.int64, types.int64), build


@kernel
def read_word(words: Any, index: int) -> int:
    """`load_acquire` for Python."""
    value: int = load_acquire(words, np.int64(index))
    return value


@kernel
def write_word(words: Any, index: int, value: int) -> None:
    """`store_release` for Python."""
    store_release(words, np.int64(index), np.int64(value))


def view_of(kind: Any) -> Any:
    """A function, for compiled code, that makes an array (n,) of ``kind`` from an address and a count."""
    item = numba.from_dtype(np.dtype(kind))
    array = types.Array(item, 1, "C")

    @intrinsic  # type: ignore[untyped-decorator]
    def view(typing_context: Any, address: Any, count: Any) -> Any:
        def build(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            address, count = arguments
            made = make_array(array)(context, builder)
            data = context.get_data_type(item)
            size = context.get_constant(types.intp, context.get_abi_sizeof(data))
            populate_array(
                made,
                data=builder.inttoptr(address, data.as_pointer()),
                shape=cgutils.pack_array(builder, [count]),
                strides=cgutils.pack_array(builder, [size]),
                itemsize=size,
                meminfo=None,
            )
            return made._getvalue()

        return array(types.int64, types.int64), build

    return view


view_float32 = view_of(np.float32)
view_float64 = view_of(np.float64)
view_int64 = view_of(np.int64)
