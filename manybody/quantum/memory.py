"""What a matrix-product ground state will cost, before it is started."""

from dataclasses import dataclass

import numpy as np

from manybody.quantum.problem import Problem


@dataclass(frozen=True)
class Estimate:
    """bytes at the peak of one solve, seconds of one half sweep at that bond dimension on one core, and the bond
    dimension."""

    bytes: float
    seconds: float
    bond_dimension: int


def estimate(problem: Problem, bond: int, vectors: int) -> Estimate:
    """Cost at bond dimension `bond` from shapes alone."""
    dims = [1.0]
    for count in problem.levels:
        dims.append(min(dims[-1] * float(count), 1e18))
    back = [1.0]
    for count in problem.levels[::-1]:
        back.append(min(back[-1] * float(count), 1e18))
    bonds = np.minimum(np.minimum(dims, back[::-1]), bond)
    # sum over charges of D_q^2 = D^2 / share; share = effective number of blocks, measured for S = 1/2 ... 5 at D = 100
    # ... 500.
    share = 3.2 + 1.7 * float(problem.spins.max()) if problem.conserved else 1.0
    squares = np.maximum(bonds**2 / max(share, 1.0), bonds)
    number = 8 if problem.real else 16
    widths = np.array([2, *[site.delta_right.size for site in problem.sites]], float)
    levels = problem.levels.astype(float)
    environments = float((squares * (widths - 1)).sum()) * number
    tensors = float((levels * np.sqrt(squares[:-1] * squares[1:])).sum()) * number
    site = levels * np.sqrt(squares[:-1] * squares[1:])
    working = float((site * (widths[:-1] + widths[1:] + vectors + 6)).max()) * number
    flops = 4 * float((site * np.sqrt(bonds[:-1] * bonds[1:]) / max(share, 1.0) * (widths[:-1] + widths[1:]) / 2).sum())
    seconds = (vectors + 3) * flops * (1 if problem.real else 4) / 1e10 + 1e-3 * len(levels)
    # The factor covers enlarged bonds before they are cut; measured peaks lie between 0.65 and 1.5 times the estimate.
    return Estimate(1.5 * (environments + tensors + 1.5 * working), seconds, int(bonds.max()))


def largest_bond(problem: Problem, memory: float, vectors: int) -> int:
    """The largest bond dimension that stays within `memory` bytes, at least 1."""
    low, high = 1, 2**17
    if estimate(problem, high, vectors).bytes <= memory:
        return high
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (middle, high) if estimate(problem, middle, vectors).bytes <= memory else (low, middle)
    return low
