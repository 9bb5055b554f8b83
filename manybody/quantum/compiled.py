"""How the inner loops are compiled: once per machine, kept on disk, free of the interpreter lock; their memory."""

import threading
import weakref

import numba
import numpy as np
from numba.extending import overload

compiled = numba.njit(cache=True, nogil=True, error_model="numpy")
inlined = numba.njit(inline="always", nogil=True, error_model="numpy")


def conjugate(x):
    """Complex conjugate; of a real array the array itself, not a copy. For compiled functions."""
    return np.conj(x)


@overload(conjugate)
def _conjugate(x):
    if isinstance(x.dtype, numba.types.Complex):
        return lambda x: np.conj(x)
    return lambda x: x


class Scratch:
    """Working memory of a sweep that outlives its steps: fresh pages for every large temporary cost a good part of the
    arithmetic done on them. Compiled functions take a flat array, use their own where it is too small, and tell how
    many elements they needed."""

    def __init__(self, dtype: np.dtype):
        self.array = np.empty(0, dtype)

    def enlarge(self, needed: int) -> None:
        if needed > self.array.size:
            self.array = np.empty(0, self.array.dtype)  # the old one goes first
            self.array = np.empty(int(1.2 * needed), self.array.dtype)


_thread = threading.local()


def shared_scratch(dtype: np.dtype) -> Scratch:
    """The scratch memory that all chains of a thread share while one of them lives."""
    known = _thread.__dict__.setdefault("known", weakref.WeakValueDictionary())
    scratch = known.get(np.dtype(dtype))
    if scratch is None:
        scratch = known[np.dtype(dtype)] = Scratch(dtype)
    return scratch


@compiled
def sound(tensor):
    """Whether a tensor has a norm. A kernel that raised half way would never give its arguments' memory back."""
    square = np.vdot(tensor, tensor).real
    return 0 < square < np.inf


@compiled
def room(scratch, needed):
    """The scratch array where it is large enough, a new one otherwise."""
    if scratch.size >= needed:
        return scratch
    return np.empty(needed, scratch.dtype)
