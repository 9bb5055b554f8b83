"""Products of matrices that lie in flat arrays, for compiled code: the BLAS behind scipy, called with addresses.

np.dot would need views of the three matrices, and counting their references costs more than the arithmetic of small
blocks.
"""

import numba
from llvmlite import binding, ir
from numba import types
from numba.extending import get_cython_function_address, intrinsic

from manybody.quantum.compiled import compiled

PLAIN, TURNED, ADJOINT = ord("N"), ord("T"), ord("C")
"""How a matrix enters a product: as it lies there, transposed, or also complex conjugate."""

_NAMES = {types.float64: "dgemm", types.complex128: "zgemm"}
for _name in _NAMES.values():
    # By name, not by address: compiled code is kept on disk.
    binding.add_symbol(f"manybody_{_name}", get_cython_function_address("scipy.linalg.cython_blas", _name))


@compiled
def product(target, goal, left, source, right, origin, m, k, n, left_form=PLAIN, right_form=PLAIN):
    """target (m, n) = left (m, k) times right (k, n), each row-major from an element of a contiguous array on; a matrix
    that is not PLAIN lies there with its rows and columns exchanged. One number type, float64 or complex128."""
    if m > 0 and n > 0 and k > 0:
        _gemm(
            right_form, left_form, n, m, k, right, origin, n if right_form == PLAIN else k, left, source,
            k if left_form == PLAIN else m, target, goal, n,
        )  # fmt: skip
    elif k == 0:
        target.reshape(target.size)[goal : goal + m * n] = 0


@intrinsic
def _gemm(typing, first_form, second_form, m, n, k, first, a, first_step, second, b, second_step, target, c, step):
    """BLAS xGEMM (column-major, see Dongarra, Du Croz, Hammarling, Duff 1990, ACM Trans. Math. Softw. 16, 1) without
    adding to the target."""
    arrays = first, second, target
    fits = all(isinstance(x, types.Array) and x.layout == "C" and x.dtype == target.dtype for x in arrays)
    if not fits or not target.mutable or target.dtype not in _NAMES:
        raise numba.TypingError(
            f"no product of {arrays}: contiguous arrays of float64 or of complex128 are needed, to write to"
        )
    name = f"manybody_{_NAMES[target.dtype]}"
    given = first_form, second_form, m, n, k, first, a, first_step, second, b, second_step, target, c, step

    def generate(context, builder, signature, values):
        def stored(value):
            with builder.goto_entry_block():
                place = builder.alloca(value.type)
            builder.store(value, place)
            return place

        def integer(index):
            # 64 bits: a library with shorter integers reads the lower half, which comes first.
            return stored(context.cast(builder, values[index], signature.args[index], types.int64))

        def matrix(array, offset):
            data = context.make_array(signature.args[array])(context, builder, values[array]).data
            return builder.gep(data, [context.cast(builder, values[offset], signature.args[offset], types.int64)])

        one, zero = (stored(context.get_constant_generic(builder, target.dtype, number)) for number in (1.0, 0.0))
        arguments = [
            integer(0), integer(1), integer(2), integer(3), integer(4), one, matrix(5, 6), integer(7), matrix(8, 9),
            integer(10), zero, matrix(11, 12), integer(13),
        ]  # fmt: skip
        kind = ir.FunctionType(ir.VoidType(), [argument.type for argument in arguments])
        module = builder.module
        function = module.globals[name] if name in module.globals else ir.Function(module, kind, name)
        builder.call(function, arguments)
        return context.get_dummy_value()

    return types.void(*given), generate
