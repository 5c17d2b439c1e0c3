"""Everything about compiling in one place: numba's options, its cache, and the few low-level pieces.

Options, each with its reason: ``nogil`` so that replicates run in threads; ``error_model="numpy"`` because a
checked division costs a branch; no ``fastmath``, because results must be equal to the bit on every machine.
Indices are unsigned (``np.uint64``), since a signed index costs a wrap-around test.

Numba keys a cached function by its own file only, so an edited helper elsewhere would leave old machine code
in use. Cache folder and cached names here carry a digest of all sources of the package.
"""

import types
from collections.abc import Callable
from functools import lru_cache
from pathlib import Path
from typing import Any

import numba
import numpy as np
from llvmlite import ir
from numba.core import cgutils
from numba.extending import intrinsic
from platformdirs import user_cache_path

from labkit.sources import source_digest

CONFIG: Any = numba.config
OPTIONS: dict[str, Any] = {"nogil": True, "error_model": "numpy"}

compiled = numba.njit(**OPTIONS)
# Inlined before compiling proper: inside a hot loop even an uncalled-for reference count would cost more than
# the rest of the loop. Such helpers have no array in only one branch, for the same reason.
inlined = numba.njit(inline="always", **OPTIONS)
# Inlined by LLVM instead, which compiles faster; for pieces with many arguments that hot loops call.
folded = numba.njit(forceinline=True, **OPTIONS)


@lru_cache(maxsize=1)
def _sources() -> str:
    digest = source_digest(Path(__file__).parent)
    if not CONFIG.CACHE_DIR:
        CONFIG.CACHE_DIR = str(user_cache_path("labkit", appauthor=False) / f"compiled-{digest}")
    return digest


def bind(function: Callable, name: str, **pieces: Any) -> types.FunctionType:
    """Return a copy of a plain function, renamed, whose given global names stand for the given pieces."""
    copy = types.FunctionType(function.__code__, {**function.__globals__, **pieces}, function.__name__)
    copy.__qualname__ = f"{function.__qualname__}_{name}"
    copy.__module__ = function.__module__
    return copy


def specialise(loop: Callable, name: str, *, cache: bool, **pieces: Any) -> Callable:
    """Compile a copy of `loop` in which the given global names stand for the given compiled pieces.

    Parameters
    ----------
    loop : function
        A plain Python function that calls its variable pieces by global names.
    name : str
        A word for this copy; it keys the cache, so equal names must mean equal pieces.
    cache : bool
        Keep the machine code on disk. Set it to False for pieces that a user may edit.
    **pieces
        Compiled functions by the global name that the loop calls them by.
    """
    if cache:
        try:
            # The digest is in the name as well, for a cache folder of the user's or numba's own choice.
            return numba.njit(cache=True, **OPTIONS)(bind(loop, f"{name}_{_sources()}", **pieces))
        except RuntimeError:  # no folder can be written: compile afresh in each process
            pass
    return numba.njit(**OPTIONS)(bind(loop, name, **pieces))


@lru_cache(maxsize=256)
def kept(function: Callable) -> Callable:
    """Return a plain function compiled, its machine code kept on disk.

    For calls from Python, and for what many loops share: it is then not compiled anew with each of them. All
    that the function calls must be defined above it.
    """
    return specialise(function, "kept", cache=True)


if CONFIG.DISABLE_JIT:

    def multiply_wide(a, b):  # noqa: D103
        product = int(a) * int(b)
        return np.uint64(product >> 64), np.uint64(product & 0xFFFFFFFFFFFFFFFF)

    def prefetch(array, row):  # noqa: D103
        return None

    def borrowed(array):  # noqa: D103
        return array

    def bits_of(number):  # noqa: D103
        return np.float64(number).view(np.int64)

else:

    @intrinsic
    def bits_of(typingctx, number):
        """Return the 64 bits of a float as a whole number: exponent first, so that order is kept above 0."""

        def generate(context, builder, signature, arguments):
            return builder.bitcast(arguments[0], ir.IntType(64))

        return numba.int64(numba.float64), generate

    @intrinsic
    def multiply_wide(typingctx, a, b):
        """Return the high and the low 64 bits of the product of two unsigned 64-bit words."""
        signature = numba.types.UniTuple(numba.uint64, 2)(numba.uint64, numba.uint64)

        def generate(context, builder, signature, arguments):
            word, wide = ir.IntType(64), ir.IntType(128)
            left, right = (builder.zext(argument, wide) for argument in arguments)
            product = builder.mul(left, right)
            high = builder.trunc(builder.lshr(product, ir.Constant(wide, 64)), word)
            return context.make_tuple(builder, signature.return_type, [high, builder.trunc(product, word)])

        return signature, generate

    @intrinsic
    def prefetch(typingctx, array, row):
        """Ask the processor to fetch `array[row]` (first axis, no bounds check) into its caches."""
        signature = numba.void(array, numba.uint64)

        def generate(context, builder, signature, arguments):
            kind = signature.args[0]
            struct = context.make_array(kind)(context, builder, arguments[0])
            stride = cgutils.unpack_tuple(builder, struct.strides, kind.ndim)[0]
            byte, flag = ir.IntType(8).as_pointer(), ir.IntType(32)
            place = builder.gep(builder.bitcast(struct.data, byte), [builder.mul(arguments[1], stride)])
            fetch = cgutils.get_or_insert_function(
                builder.module, ir.FunctionType(ir.VoidType(), [byte, flag, flag, flag]), "llvm.prefetch.p0i8"
            )
            builder.call(fetch, [place, *(ir.Constant(flag, value) for value in (0, 3, 1))])
            return context.get_dummy_value()

        return signature, generate

    @intrinsic
    def borrowed(typingctx, array):
        """Return the array without a share in its memory: nothing is counted when it is passed on.

        Around a call that may raise numba cannot leave the counting out, which costs ten times the call. The
        caller must keep the array alive.
        """

        def generate(context, builder, signature, arguments):
            kind = signature.return_type
            struct = context.make_array(kind)(context, builder, arguments[0])
            struct.meminfo = cgutils.get_null_value(struct.meminfo.type)
            struct.parent = cgutils.get_null_value(struct.parent.type)
            return struct._getvalue()

        return array(array), generate


@inlined
def advance(a, b, c, counter):
    """Step SFC64 once: return the raw 64-bit output and the four words of the new state.

    The generator of Doty-Humphrey's PractRand as NumPy ships it (``numpy.random.SFC64``); equal bit for bit.
    """
    out = a + b + counter
    return (
        out,
        b ^ (b >> np.uint64(11)),
        c + (c << np.uint64(3)),
        ((c << np.uint64(24)) | (c >> np.uint64(40))) + out,
        counter + np.uint64(1),
    )


@compiled
def next_raw(state):
    """Return one raw output of the SFC64 state, uint64 of shape (4,), which is changed in place."""
    out, state[0], state[1], state[2], state[3] = advance(state[0], state[1], state[2], state[3])
    return out


@compiled
def copy_into(target, source):
    """Copy an array into another of its length.

    ``target[:] = source`` would compile numba's own refusal of unequal shapes, too, which takes seconds.
    """
    for place in range(target.size):
        target[np.uint64(place)] = source[np.uint64(place)]


@inlined
def unit_interval(word):
    """Return the top 53 bits of a word as a float in [0, 1)."""
    return (word >> np.uint64(11)) * 2.0**-53
