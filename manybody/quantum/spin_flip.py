"""Parity under turning all spins over, used to tell nearly degenerate states of S^z = 0 apart.

The two nearly free end spins of an open S = 1 chain make a singlet and a triplet whose energies differ by less than
sweeps can see; a state converged to a mixture of both looks like the ground state and lies too high. Turned about x by
pi, one of them changes sign: psi + F psi and psi - F psi hold one each.
"""

import numpy as np

from manybody.quantum import blocks
from manybody.quantum.chain import Bond, Chain
from manybody.quantum.compiled import compiled


def flipped(chain: Chain) -> tuple[list[Bond], list[np.ndarray]]:
    """Bonds and tensors of F psi, local state s -> d - 1 - s, for a chain of S^z = 0."""
    reach = np.concatenate([[0], np.cumsum([local.max() for local in chain.local])])
    bonds = [Bond(full - bond.charges, bond.dims) for full, bond in zip(reach.tolist(), chain.bonds, strict=True)]
    tensors = []
    for site, local in enumerate(chain.local):
        left, right = chain.bonds[site], chain.bonds[site + 1]
        tensors.append(_flip(chain.tensor(site), *left.pair, *right.pair, local))
    return bonds, tensors


@compiled
def _flip(tensor, left, left_dims, right, right_dims, local):
    target, column, width, start, size = blocks.by_left(left, left_dims, right, right_dims, local)
    result = np.empty(size, tensor.dtype)
    for i in range(left.size):
        place = 0
        for s in range(local.size - 1, -1, -1):
            j = target[i, s]
            if j >= 0:
                for x in range(left_dims[i]):
                    for y in range(right_dims[j]):
                        result[start[i] + x * width[i] + place + y] = tensor[start[i] + x * width[i] + column[i, s] + y]
                place += right_dims[j]
    return result


def overlap(chain: Chain) -> float:
    """Real part of <psi | F psi>, between -1 and 1."""
    bonds, tensors = flipped(chain)
    carried = {(int(q), int(q)): np.ones((1, 1), chain.dtype) for q in chain.bonds[0].charges}
    for site, local in enumerate(chain.local):
        bra = _blocks(chain.tensor(site), chain.bonds[site], chain.bonds[site + 1], local)
        ket = _blocks(tensors[site], bonds[site], bonds[site + 1], local)
        following: dict[tuple[int, int], np.ndarray] = {}
        for (q, _), matrix in carried.items():
            for s, c in enumerate(local.tolist()):
                if (q, s) in bra and (q, s) in ket:
                    key = (q + c, q + c)
                    following[key] = following.get(key, 0) + bra[q, s].conj().T @ matrix @ ket[q, s]
        carried = following
    return float(sum(matrix.sum().real for matrix in carried.values()))


def _blocks(tensor, left: Bond, right: Bond, local) -> dict[tuple[int, int], np.ndarray]:
    target, column, width, start, _ = blocks.by_left(*left.pair, *right.pair, local)
    result = {}
    for i, q in enumerate(left.charges.tolist()):
        matrix = tensor[start[i] : start[i] + left.dims[i] * width[i]].reshape(left.dims[i], width[i])
        for s in range(local.size):
            j = target[i, s]
            if j >= 0:
                result[q, s] = matrix[:, column[i, s] : column[i, s] + right.dims[j]]
    return result


def parity_part(chain: Chain, sign: float, limit: int, allowed: float) -> Chain:
    """psi + sign F psi, normalized, centre at site 0; bonds up to twice as large before they are cut (see
    split.choose)."""
    bonds, tensors = flipped(chain)
    length = chain.length
    summed = [_union(a, b) if 0 < k < length else a for k, (a, b) in enumerate(zip(chain.bonds, bonds, strict=True))]
    new = []
    for site, local in enumerate(chain.local):
        left, right = summed[site], summed[site + 1]
        target, column, width, start, size = blocks.by_left(*left.pair, *right.pair, local)
        result = np.zeros(size, chain.dtype)
        first = _blocks(chain.tensor(site), chain.bonds[site], chain.bonds[site + 1], local)
        second = _blocks(tensors[site], bonds[site], bonds[site + 1], local)
        for i, q in enumerate(left.charges.tolist()):
            matrix = result[start[i] : start[i] + left.dims[i] * width[i]].reshape(left.dims[i], width[i])
            for s in range(local.size):
                if target[i, s] < 0:
                    continue
                block = matrix[:, column[i, s] : column[i, s] + right.dims[target[i, s]]]
                if (q, s) in first:
                    a = first[q, s]
                    block[: a.shape[0], : a.shape[1]] += a
                if (q, s) in second:
                    b = second[q, s] * (sign if site == 0 else 1.0)
                    block[block.shape[0] - b.shape[0] :, block.shape[1] - b.shape[1] :] += b
        new.append(result)
    joined = Chain(
        list(chain.local), list(chain.operators), summed, new, chain.total,
        reverse=chain.reverse, other_operators=list(chain.other_operators),
    )  # fmt: skip
    joined.prepare(limit, allowed)
    return joined


def other_parity(chain: Chain) -> Chain | None:
    """S^z psi, S^z of the first site in view, normalized, ready for sweeps; None where it vanishes."""
    left, right, local = chain.bonds[0], chain.bonds[1], chain.local[0]
    target, column, width, start, _ = blocks.by_left(*left.pair, *right.pair, local)
    tensor = chain.tensor(0).copy()
    for i in range(left.charges.size):
        matrix = tensor[start[i] : start[i] + left.dims[i] * width[i]].reshape(left.dims[i], width[i])
        for s, c in enumerate(local.tolist()):
            if target[i, s] >= 0:
                matrix[:, column[i, s] : column[i, s] + right.dims[target[i, s]]] *= c - local.max() / 2
    if np.linalg.norm(tensor) < 1e-6:
        return None
    tensors = [tensor, *(chain.tensor(site).copy() for site in range(1, chain.length))]
    new = Chain(
        list(chain.local), list(chain.operators), list(chain.bonds), tensors, chain.total,
        reverse=chain.reverse, other_operators=list(chain.other_operators),
    )  # fmt: skip
    new.prepare()
    return new


def _union(first: Bond, second: Bond) -> Bond:
    charges = np.union1d(first.charges, second.charges)
    dims = np.zeros(charges.size, np.int64)
    dims[np.searchsorted(charges, first.charges)] += first.dims
    dims[np.searchsorted(charges, second.charges)] += second.dims
    return Bond(charges, dims)
