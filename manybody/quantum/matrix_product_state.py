"""A finished matrix-product state: kept, saved, restored, handed to a general tensor-network library."""

from dataclasses import dataclass

import numpy as np
from scipy.linalg import expm
from scipy.spatial.transform import Rotation

from manybody.model.spin_matrices import spin_matrices
from manybody.quantum import blocks
from manybody.quantum.chain import Bond, Chain
from manybody.quantum.saved_states import pack, unpack

FORMAT = 1


@dataclass(frozen=True, eq=False)
class MatrixProductState:
    """A normalized state in sweep order: position p holds site order[p] of the operator.

    spins (N,) and frames (N, 3, 3) in site numbering: the tensors live in local frames, a vector v of which is
    frames[i].T @ v in the frame of the operator. local: charge of every local state kept (highest m of the local frame
    first). bonds, tensors: see blocks (layout by left), centre at position 0. total: charge of the whole.
    """

    order: np.ndarray
    spins: np.ndarray
    frames: np.ndarray
    local: list[np.ndarray]
    bonds: list[Bond]
    tensors: list[np.ndarray]
    total: int

    @property
    def sites(self) -> int:
        return len(self.local)

    @property
    def bond_dimension(self) -> int:
        return max(bond.dimension for bond in self.bonds)

    def dense_tensor(self, position: int) -> np.ndarray:
        """(left, right, d) array in the local frame, levels not kept left out."""
        left, right, local = self.bonds[position], self.bonds[position + 1], self.local[position]
        target, column, width, start, _ = blocks.by_left(*left.pair, *right.pair, local)
        rows, columns = blocks.offsets(left.dims), blocks.offsets(right.dims)
        result = np.zeros((left.dimension, right.dimension, local.size), self.tensors[position].dtype)
        for i in range(left.charges.size):
            matrix = self.tensors[position][start[i] : start[i] + left.dims[i] * width[i]].reshape(
                left.dims[i], width[i]
            )
            for s in range(local.size):
                j = target[i, s]
                if j >= 0:
                    block = matrix[:, column[i, s] : column[i, s] + right.dims[j]]
                    result[rows[i] : rows[i] + left.dims[i], columns[j] : columns[j] + right.dims[j], s] = block
        return result

    def site_array(self, position: int) -> np.ndarray:
        """(left, right, 2S + 1) array in the frame of the operator, basis m = S ... -S."""
        site = self.order[position]
        spin = self.spins[site]
        array = self.dense_tensor(position)
        full = round(2 * spin) + 1
        array = np.pad(array, ((0, 0), (0, 0), (0, full - array.shape[2])))
        if np.allclose(self.frames[site], np.eye(3), atol=1e-14):
            return array
        vector = Rotation.from_matrix(self.frames[site]).as_rotvec()
        turn = expm(-1j * np.tensordot(vector, np.array(spin_matrices(spin)), axes=1))
        turned = array @ turn.conj()  # |operator frame> = U^+ |local frame>
        return turned.real if np.abs(turned.imag).max() < 1e-14 * np.abs(turned).max() else turned

    def to_quimb(self, site_order: bool = True):
        """quimb MatrixProductState in the frame of the operator, basis m = S ... -S at every site.

        site_order: bring the sites into the numbering of the operator by exchanging neighbours (exact up to 1e-14 of
        the norm; bonds may grow). Otherwise site p of the result is site order[p].
        """
        import quimb.tensor as qtn

        arrays = [self.site_array(p) for p in range(self.sites)]
        if self.sites == 1:
            return qtn.MatrixProductState([arrays[0].reshape(-1)])
        arrays[0], arrays[-1] = arrays[0][0], arrays[-1][:, 0]
        state = qtn.MatrixProductState(arrays, shape="lrp")
        if site_order:
            where = self.order.tolist()
            for site in range(self.sites):
                position = where.index(site)
                if position != site:
                    state.swap_site_to_(position, site, cutoff=1e-14, cutoff_mode="rel")
                    where.insert(site, where.pop(position))
        return state

    def to_bytes(self) -> bytes:
        """Self-contained bytes, readable by from_bytes on any machine; no pickle."""
        return pack(arrays_of(self))

    @classmethod
    def from_bytes(cls, data: bytes) -> "MatrixProductState":
        return state_of(unpack(data))


def of_chain(chain: Chain, order: np.ndarray, spins: np.ndarray, frames: np.ndarray) -> MatrixProductState:
    """The state of a chain whose centre is at site 0 of its view; the chain ends up in the forward view."""
    if chain.reverse:
        for site in range(chain.length - 1):
            chain.shift(site)
            chain.advance(site)
        chain.mirror()
    tensors = [chain.tensor(site).copy() for site in range(chain.length)]
    tensors[0] /= np.linalg.norm(tensors[0])
    bonds = [Bond(bond.charges.copy(), bond.dims.copy()) for bond in chain.bonds]
    return MatrixProductState(order, spins, frames, list(chain.local), bonds, tensors, chain.total)


def arrays_of(state: MatrixProductState) -> dict[str, np.ndarray]:
    """Plain arrays by name."""
    return {
        "format": np.array([FORMAT]),
        "order": state.order,
        "spins": state.spins,
        "frames": state.frames,
        "total": np.array([state.total]),
        "levels": np.array([local.size for local in state.local]),
        "local": np.concatenate(state.local),
        "bonds": np.array([bond.charges.size for bond in state.bonds]),
        "charges": np.concatenate([bond.charges for bond in state.bonds]),
        "dims": np.concatenate([bond.dims for bond in state.bonds]),
        "lengths": np.array([tensor.size for tensor in state.tensors]),
        "tensors": np.concatenate(state.tensors),
    }


def state_of(arrays: dict[str, np.ndarray]) -> MatrixProductState:
    """The inverse of arrays_of. Raises ValueError for bytes of another format."""
    if "format" not in arrays or arrays["format"][0] != FORMAT:
        raise ValueError("these bytes hold no matrix-product state of this version")

    def cut(name: str, sizes: str) -> list[np.ndarray]:
        pieces = np.split(arrays[name], np.cumsum(arrays[sizes])[:-1])
        return [np.ascontiguousarray(piece) for piece in pieces]

    bonds = [Bond(c, d) for c, d in zip(cut("charges", "bonds"), cut("dims", "bonds"), strict=True)]
    return MatrixProductState(
        arrays["order"], arrays["spins"], arrays["frames"], cut("local", "levels"), bonds, cut("tensors", "lengths"),
        int(arrays["total"][0]),
    )  # fmt: skip
