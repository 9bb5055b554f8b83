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


WIDE = 12
"""From this many operator channels on one-site steps are cheaper than pairs."""
MOST_VECTORS = 40
VECTOR_BYTES = 2**25
"""What the Lanczos vectors of a crawling sweep may take beyond the usual number."""
EXPANDED = 1.3
"""One-site steps work on bonds larger by this before they cut them."""


def pairs(problem: Problem) -> bool:
    """Whether sweeps go in two-site steps."""
    return int(problem.levels.max()) <= 3 and problem.width < WIDE


def most_vectors(size: float, vectors: int) -> int:
    """Lanczos vectors of `size` bytes that a step may take where sweeps crawl."""
    return max(vectors, min(MOST_VECTORS, int(VECTOR_BYTES / size)))


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
    environments = number * float((squares * (widths - 1)).sum())
    sites = number * levels * np.sqrt(squares[:-1] * squares[1:])
    if pairs(problem) and levels.size > 1:
        steps = number * levels[:-1] * levels[1:] * np.sqrt(squares[:-2] * squares[2:])
        channels = widths[:-2] + widths[2:]
    else:
        steps, channels = EXPANDED * sites, widths[:-1] + widths[1:]
    largest = float(steps.max())
    # A step keeps two partial products, its vectors and some copies; elsewhere a part of one spin-flip parity has bonds
    # twice as large before they are cut.
    working = float((steps * channels).max()) + largest * (6 + most_vectors(largest, vectors))
    if problem.conserved:
        working = max(working, 4 * float(sites.sum()))
    flops = (
        4
        * float(
            (levels * np.sqrt(squares[:-1] * squares[1:] * bonds[:-1] * bonds[1:]) * (widths[:-1] + widths[1:])).sum()
        )
        / (2 * max(share, 1.0))
    )
    # Measured: 40 GFLOP/s of these flops, which are an upper estimate, and half a millisecond a step beside them.
    seconds = (vectors + 3) * flops * (1 if problem.real else 4) / 4e10 + 5e-4 * len(levels)
    return Estimate(environments + 4 * float(sites.sum()) + 1.2 * working, seconds, int(bonds.max()))


def largest_bond(problem: Problem, memory: float, vectors: int) -> int:
    """The largest bond dimension that stays within `memory` bytes, at least 1."""
    low, high = 1, 2**17
    if estimate(problem, high, vectors).bytes <= memory:
        return high
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (middle, high) if estimate(problem, middle, vectors).bytes <= memory else (low, middle)
    return low
