"""Reads a file that somebody else names: regular, and of bounded size, or not at all."""

import os
import stat


def read_regular(path: str | os.PathLike, most: int) -> tuple[bytes, str]:
    """(content, "") or (b"", why it cannot be read)."""
    try:
        # Without blocking, so that a pipe cannot hold the reader up before it is recognized.
        handle = os.open(path, os.O_RDONLY | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_BINARY", 0))
    except (OSError, ValueError) as error:
        return b"", f"cannot be opened ({getattr(error, 'strerror', None) or 'no such path'})"
    try:
        if not stat.S_ISREG(os.fstat(handle).st_mode):
            return b"", "is not a regular file"
        content = bytearray()
        while len(content) <= most and (piece := os.read(handle, 2**20)):
            content += piece
    except OSError as error:
        return b"", f"cannot be read ({error.strerror})"
    finally:
        os.close(handle)
    if len(content) > most:
        return b"", f"is larger than {most // 2**20} MiB"
    return bytes(content), ""
