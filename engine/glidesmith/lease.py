"""A lease: what lets one stream at a time call the engine, whatever became of the streams before it.

A stream whose device is lost may be impossible to close, and nothing keeps such a stream from coming back to
life later. So PortAudio never gets the engine's own callback. It gets the one compiled here, with a record of
its own for each stream: while the lease is held it calls on; once revoked it fills the buffer with silence
and tells PortAudio to abort. It keeps to the rules of the audio thread: no Python, lock, allocation or file.
"""

import ctypes
import sys
import time
from typing import Any

import numpy as np
from llvmlite import ir
from numba import types
from numba.extending import intrinsic

from glidesmith.compiled import callback_function, kernel
from glidesmith.exchange import view_float32, view_int64

_HELD, _BUSY, _FRAMES, _CALLBACK, _USERDATA, _CHANNELS = range(6)
_CONTINUE, _ABORT = 0, 2  # paContinue, paAbort of portaudio.h
_PATIENCE_S = 1.0

_LONG = types.uint32 if sys.platform == "win32" else types.uint64
STREAM_CALLBACK = types.int32(types.intp, types.intp, _LONG, types.intp, _LONG, types.intp)
"""``PaStreamCallback`` of portaudio.h, its pointers as whole numbers: input, output, frames, time
information, status flags, user data."""


def _place(context: Any, builder: Any, signature: Any, words: Any, index: Any) -> Any:
    array = context.make_array(signature.args[0])(context, builder, words)
    return builder.gep(array.data, [context.cast(builder, index, signature.args[1], types.intp)])


@intrinsic  # type: ignore[untyped-decorator]
def _load(typing_context: Any, words: Any, index: Any) -> Any:
    """A word, in an order that all threads agree on (sequentially consistent, C11 7.17.3).

    Acquire and release are not enough for two threads that each set one word and then look at the other's.
    """

    def build(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return builder.load_atomic(_place(context, builder, signature, *arguments), "seq_cst", 8)

    return types.int64(words, index), build


@intrinsic  # type: ignore[untyped-decorator]
def _store(typing_context: Any, words: Any, index: Any, value: Any) -> Any:
    """Set a word, in an order that all threads agree on."""

    def build(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        words, index, value = arguments
        number = context.cast(builder, value, signature.args[2], types.int64)
        builder.store_atomic(number, _place(context, builder, signature, words, index), "seq_cst", 8)
        return context.get_dummy_value()

    return types.void(words, index, value), build


@intrinsic  # type: ignore[untyped-decorator]
def _call(typing_context: Any, address: Any, *arguments: Any) -> Any:
    """Call the stream callback that stands at an address."""

    def build(context: Any, builder: Any, signature: Any, values: Any) -> Any:
        items = [builder.extract_value(values[1], i) for i in range(len(STREAM_CALLBACK.args))]
        kinds = [context.get_value_type(kind) for kind in STREAM_CALLBACK.args]
        function = ir.FunctionType(context.get_value_type(types.int32), kinds)
        return builder.call(builder.inttoptr(values[0], function.as_pointer()), items)

    return types.int32(address, types.StarArgTuple(STREAM_CALLBACK.args)), build


def _answer(given: int, output: int, frames: int, moment: int, flags: int, record: int) -> int:
    words = view_int64(record, _CHANNELS + 1)
    _store(words, _BUSY, 1)
    if _load(words, _HELD) == 0:
        view_float32(output, np.int64(frames) * words[_CHANNELS])[:] = 0.0
        _store(words, _BUSY, 0)
        return _ABORT
    outcome = _call(words[_CALLBACK], given, output, frames, moment, flags, words[_USERDATA])
    _store(words, _FRAMES, words[_FRAMES] + np.int64(frames))
    _store(words, _BUSY, 0)
    return outcome  # type: ignore[no-any-return]


_compiled: list[Any] = []


def compiled_callback() -> Any:
    """The callback of every lease, compiled when it is first asked for."""
    if not _compiled:
        _compiled.append(callback_function(STREAM_CALLBACK)(_answer))
    return _compiled[0]


@kernel
def _set(words: Any, index: int, value: int) -> None:
    _store(words, index, value)


@kernel
def _get(words: Any, index: int) -> int:
    return _load(words, index)  # type: ignore[no-any-return]


class Lease:
    """The right of one stream to call the callback at ``address`` with ``userdata``, for ``channels``.

    ``callback`` and ``userdata`` are the addresses that the stream gets instead. Keep the lease for as long
    as the stream is there.
    """

    def __init__(self, address: int, userdata: int, channels: int) -> None:
        self._words = np.array([1, 0, 0, address, userdata, channels], dtype=np.int64)
        self.callback = int(compiled_callback().address)
        self.userdata = int(self._words.ctypes.data)

    @property
    def frames(self) -> int:
        """How many frames the stream has asked for and got, so far."""
        return int(_get(self._words, _FRAMES))

    def revoke(self) -> bool:
        """From here on the stream gets silence; whether its last call has come back.

        It always has, but for an audio thread that the system stopped in the middle of one.
        """
        _set(self._words, _HELD, 0)
        patience = time.monotonic() + _PATIENCE_S
        while _get(self._words, _BUSY):
            if time.monotonic() > patience:
                return False
            time.sleep(0.001)
        return True


def keep_for_ever(thing: object) -> None:
    """Never free a thing: what a stream that can't be closed still points to must outlive it."""
    ctypes.pythonapi.Py_IncRef(ctypes.py_object(thing))
