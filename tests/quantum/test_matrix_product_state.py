"""States handed to quimb, saved, restored, and their observables against exact diagonalization."""

import numpy as np
import pytest
from reference import reference
from spin_models import chain, heisenberg, reference_operator

from manybody.model import couplings
from manybody.model.quantization import quantize
from manybody.quantum.exact import exact_ground_state
from manybody.quantum.matrix_product_state import MatrixProductState
from manybody.quantum.operators import sparse_operator
from manybody.quantum.result import QuantumSettings
from manybody.quantum.sweeps import matrix_product_ground_state

EVERYTHING = ("moments", "correlations", "entanglement")


def models():
    shuffled = [(0, 2), (2, 5), (5, 1), (1, 4), (4, 3), (3, 0)]
    three = [(0, 1), (1, 2)]
    return {
        "isotropic, sites out of order": quantize(couplings.exchange(6, shuffled, 1.0), 1),
        "conserved along a tilted axis": quantize(
            couplings.exchange(6, chain(6), 1.0)
            + couplings.field(6, range(6), [0.3, 0.2, 0.8])
            + couplings.antisymmetric(6, chain(6), [0.15, 0.1, 0.4]),
            [1, 0.5, 1, 1.5, 0.5, 1],
        ),
        "nothing conserved, real": quantize(
            couplings.exchange(5, chain(5), [1, 0.7, 1.2]) + couplings.field(5, range(5), [0.4, 0.0, 0.3]), 1.5
        ),
        "nothing conserved, complex": quantize(
            couplings.exchange(6, chain(6), [1, 0.7, 1.2])
            + couplings.antisymmetric(6, chain(6), [0.2, 0.3, 0.5])
            + couplings.field(6, range(6), [0.4, 0.2, 0.3]),
            0.5,
        ),
        "levels left out": quantize(
            couplings.exchange(3, three, [1, 0.7, 1.2]) + couplings.field(3, range(3), [0.4, 0.1, 0.3]), 5.0
        ),
    }


@pytest.mark.parametrize("name", models())
def test_quimb_state_has_the_energy_and_norm_and_observables_are_exact(name):
    op = models()[name]
    ours = matrix_product_ground_state(op, QuantumSettings(accuracy=1e-12, observables=EVERYTHING))
    vector = ours.state.to_quimb().to_dense().reshape(-1)
    matrix = sparse_operator(op)
    assert abs(np.linalg.norm(vector) - 1) < 1e-10
    assert abs(np.vdot(vector, matrix @ vector).real - ours.energy) < 1e-10
    exact = exact_ground_state(op, QuantumSettings(observables=EVERYTHING))
    assert abs(ours.energy - exact.energy) < 1e-10
    for quantity in ("moments", "moments_squared", "correlations", "coherent_overlap"):
        # A ground state of S^z and its mirror image differ in the sign of moments only; none is degenerate here but by
        # that.
        found, wanted = ours.observables[quantity], exact.observables[quantity]
        np.testing.assert_allclose(found, wanted, atol=2e-6, err_msg=quantity)
    if np.array_equal(ours.observables["entanglement_order"], exact.observables["entanglement_order"]):
        np.testing.assert_allclose(ours.observables["entanglement"], exact.observables["entanglement"], atol=1e-6)


def test_bytes_bring_the_same_state_back():
    state = matrix_product_ground_state(models()["nothing conserved, complex"], QuantumSettings(accuracy=1e-8)).state
    again = MatrixProductState.from_bytes(state.to_bytes())
    assert again.bond_dimension == state.bond_dimension
    for position in range(state.sites):
        np.testing.assert_array_equal(again.site_array(position), state.site_array(position))
    with pytest.raises(ValueError, match="no matrix-product state"):
        import io

        buffer = io.BytesIO()
        np.savez(buffer, order=np.arange(3))
        MatrixProductState.from_bytes(buffer.getvalue())


def test_entanglement_of_a_singlet_and_of_a_product():
    pair = matrix_product_ground_state(heisenberg(2, [(0, 1)], 1.0), QuantumSettings(observables=("entanglement",)))
    np.testing.assert_allclose(pair.observables["entanglement"], [np.log(3)], atol=1e-9)
    ferro = matrix_product_ground_state(
        heisenberg(5, chain(5), 1.0, -1.0), QuantumSettings(observables=("entanglement", "moments"))
    )
    np.testing.assert_allclose(ferro.observables["entanglement"], 0.0, atol=1e-12)
    np.testing.assert_allclose(ferro.observables["moments"], np.tile([0, 0, 1.0], (5, 1)), atol=1e-12)
    assert abs(ferro.observables["coherent_overlap"] - 1) < 1e-6


def test_quimb_energy_of_a_longer_chain_from_its_own_operator():
    import quimb.tensor as qtn

    values = reference("A037")
    ours = matrix_product_ground_state(reference_operator(values), QuantumSettings(accuracy=1e-7), None, 8.0)
    state = ours.state.to_quimb()
    operator = qtn.MPO_ham_heis(32)
    bra = state.H
    state.align_(operator, bra)
    assert abs((bra & operator & state).contract().real - ours.energy) < 1e-9
