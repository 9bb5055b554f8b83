"""Compile the kernels of sweeps into numba's cache: run by conftest beside the first tests, which do not need them."""

import numpy as np
from spin_models import chain, heisenberg

from manybody.model import couplings
from manybody.model.quantization import quantize
from manybody.quantum.result import QuantumSettings
from manybody.quantum.sweeps import matrix_product_ground_state


def canted(n, spin):
    """No conserved charge and complex numbers: exchange, antisymmetric exchange and a field along nothing in
    particular."""
    matrices = np.eye(3) + 0.4 * np.array([[0, 1, -0.5], [-1, 0, 0.3], [0.5, -0.3, 0]])
    f = couplings.exchange(n, chain(n), np.repeat(matrices[None], n - 1, axis=0))
    return quantize(f + couplings.field(n, range(n), [0.3, 0.5, 0.7]), spin)


def main() -> None:
    settings = QuantumSettings(max_bond=12, observables=("entanglement", "correlations"))
    for spin in (1, 2):
        for op in (heisenberg(8, chain(8), spin), canted(6, spin)):
            matrix_product_ground_state(op, settings)


if __name__ == "__main__":
    main()
