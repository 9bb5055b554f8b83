"""Results as bytes and back, without pickle: a JSON header followed by the raw buffers of the arrays.

Layout: the four bytes ``MBR1``, the header's length (8 bytes, little endian), the header, the buffers in order.
In the header an array stands as ``{"array": [dtype, shape, offset, bytes]}`` and a dict as ``{"dict": {...}}``. Reading
checks every length, so truncated bytes raise and never give wrong numbers; nothing read can run code.
"""

from __future__ import annotations

import json
import math
import struct

import numpy as np

MAGIC = b"MBR1"
KINDS = "biufcU"  # bool, integers, floats, complex, fixed-length text: what has a plain buffer


class EncodingError(ValueError):
    """The bytes are no complete result."""


def pack(result: dict) -> bytes:
    """Bytes of a (nested) dict of None, bool, int, float, complex, str, lists, tuples and arrays.

    Tuples come back as lists, numpy scalars as Python numbers (complex ones as 0-d arrays).
    Raises TypeError for anything else, naming the entry.
    """
    buffers: list[bytes] = []
    offset = 0

    def plain(value, where):
        nonlocal offset
        if value is None or (isinstance(value, (bool, str, int, float)) and not isinstance(value, np.generic)):
            return value
        if isinstance(value, np.generic) and value.dtype.kind in "biufU":
            return value.item()
        if isinstance(value, (complex, np.complexfloating)):
            value = np.asarray(value)
        if isinstance(value, np.ndarray):
            if value.dtype.kind not in KINDS:
                raise TypeError(f"{where}: arrays of {value.dtype} cannot be stored")
            raw = np.ascontiguousarray(value.astype(value.dtype.newbyteorder("<"), copy=False)).tobytes()
            entry = [value.dtype.newbyteorder("<").str, list(value.shape), offset, len(raw)]
            buffers.append(raw)
            offset += len(raw)
            return {"array": entry}
        if isinstance(value, dict):
            for key in value:
                if not isinstance(key, str):
                    raise TypeError(f"{where}: names must be text, got {key!r}")
            return {"dict": {key: plain(item, f"{where}.{key}") for key, item in value.items()}}
        if isinstance(value, (list, tuple)):
            return [plain(item, f"{where}[{i}]") for i, item in enumerate(value)]
        raise TypeError(f"{where}: a {type(value).__name__} cannot be stored")

    header = json.dumps(plain(dict(result), "result"), separators=(",", ":")).encode()
    return b"".join([MAGIC, struct.pack("<Q", len(header)), header, *buffers])


def unpack(data: bytes) -> dict:
    """The dict that `pack` turned into `data`. Raises EncodingError where the bytes are damaged."""
    if len(data) < 12 or data[:4] != MAGIC:
        raise EncodingError("not a stored result")
    (length,) = struct.unpack("<Q", data[4:12])
    start = 12 + length
    if start > len(data):
        raise EncodingError("a stored result is cut off in its header")

    def rich(value):
        if isinstance(value, list):
            return [rich(item) for item in value]
        if not isinstance(value, dict):
            return value
        if "dict" in value:
            return {key: rich(item) for key, item in value["dict"].items()}
        dtype, shape, offset, size = value["array"]
        dtype = np.dtype(dtype)
        if dtype.kind not in KINDS or size != dtype.itemsize * math.prod(shape) or start + offset + size > len(data):
            raise EncodingError("a stored array is cut off")
        if size == 0:
            return np.zeros(shape, dtype)
        return np.frombuffer(data, dtype, math.prod(shape), start + offset).reshape(shape).copy()

    try:
        return rich(json.loads(data[12:start]))
    except EncodingError:
        raise
    except (ValueError, KeyError, TypeError) as error:
        raise EncodingError(f"a stored result is damaged: {error}") from None
