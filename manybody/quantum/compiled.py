"""How the inner loops are compiled: once per machine, kept on disk, free of the interpreter lock."""

import numba

compiled = numba.njit(cache=True, nogil=True, error_model="numpy")
