"""Rigorous lower bounds on a quantum ground energy: sums of exact cluster energies.

Cluster bound (Anderson 1951, Phys. Rev. 83, 1260): if H is a sum of cluster operators, the sum of their ground
energies lies below the ground energy of H, since one state cannot be better for each of them than its own ground
state.
"""

import math
from collections import Counter
from dataclasses import dataclass

import numpy as np

from manybody.model.energy import EnergyFunction
from manybody.model.quantization import SpinOperator
from manybody.quantum.basis import TooLarge
from manybody.quantum.clusters import Cover, canonical_order, covers, split
from manybody.quantum.exact import estimate_exact, exact_ground_state
from manybody.quantum.ground_state import without_scalars
from manybody.quantum.ladder import shifts
from manybody.quantum.result import QuantumSettings

_DIGITS = 1e-13
"""Coefficients that agree within this fraction of the largest count as equal."""


@dataclass(frozen=True)
class ClusterBound:
    """A lower bound on the ground energy.

    value: the bound, residuals and rounding of the cluster energies already taken off. kind: the cover that gave it.
    clusters: how many clusters; distinct: how many of them had to be diagonalized; largest: sites of the largest.
    candidates: value by kind for everything that was tried; skipped: kinds that the limits forbade.
    """

    value: float
    kind: str
    clusters: int
    distinct: int
    largest: int
    candidates: dict[str, float]
    skipped: tuple[str, ...]


def cluster_bound(
    op: SpinOperator,
    max_sites: int = 13,
    max_dimension: int = 5000,
    max_seconds: float = 10.0,
    memory: int = 2 * 2**30,
    kinds: tuple[str, ...] | None = None,
) -> ClusterBound:
    """The best bound among bonds, stars, neighbourhoods, triangles, tetrahedra, plaquettes and pieces of consecutive
    sites.

    max_sites, max_dimension: of one cluster, its largest sector. max_seconds: estimated time of all diagonalizations
    of one cover, and in the sum of all; covers beyond it are skipped (the estimate, not a clock, decides: the same
    call gives the same bound). kinds: only these covers, by name ("pieces of 7"). Clusters that are the same up to
    the numbers of their sites are diagonalized once. Beyond dimension 300 a cluster energy comes from a Lanczos
    iteration, whose residual is taken off; that it found the lowest level then rests on its random start. Raises
    ValueError if no cover fits the limits or a kind does not exist for this operator.
    """
    op = without_scalars(op)
    # Equal clusters are recognized by rounded coefficients, so these have to be of order one.
    symbol, exponent = op.symbol.rescaled()
    constant, op = op.symbol.constant, SpinOperator(op.spins, symbol)
    values: dict[str, float] = {}
    best: tuple[float, Cover, int] | None = None
    skipped: list[str] = []
    known: dict[tuple, float] = {}
    spent = 0.0
    settings = QuantumSettings(memory=memory)
    candidates = covers(op.symbol, max_sites)
    if kinds is not None:
        candidates = [cover for cover in candidates if cover.kind in kinds]
        if not candidates:
            raise ValueError(f"none of the covers {', '.join(kinds)} exists for this operator within {max_sites} sites")
    for cover in _cheap_first(candidates):
        if _largest_dimension(op, cover) > max_dimension:
            skipped.append(cover.kind)
            continue
        pieces = _distinct(op, cover)
        costs = [_seconds(piece, memory) for key, (piece, _) in pieces.items() if key not in known]
        if spent + sum(costs) > max_seconds:
            skipped.append(cover.kind)
            continue
        spent += sum(costs)
        try:
            for key, (piece, _) in pieces.items():
                if key not in known:
                    solved = exact_ground_state(piece, settings)
                    # Clusters that share a key may differ in their coefficients by that much.
                    known[key] = solved.energy - solved.error - 2 * _DIGITS * shifts(piece).norm
        except TooLarge:
            skipped.append(cover.kind)
            continue
        terms = np.array([count * known[key] for key, (_, count) in pieces.items()])
        total = constant + math.ldexp(terms.sum(), exponent)
        # Rounding of the weights and of this sum.
        total -= 8 * np.finfo(float).eps * (math.ldexp(np.abs(terms).sum(), exponent) + abs(constant))
        values[cover.kind] = float(total)
        if best is None or total > best[0]:
            best = (float(total), cover, len(pieces))
    if best is None:
        raise ValueError("no cluster cover fits the limits: allow more sites, a larger dimension or more time")
    value, cover, distinct = best
    return ClusterBound(
        value=value,
        kind=cover.kind,
        clusters=len(cover.clusters),
        distinct=distinct,
        largest=max(len(cluster) for cluster in cover.clusters),
        candidates=values,
        skipped=tuple(skipped),
    )


def _cheap_first(candidates: list[Cover]) -> list[Cover]:
    """Small clusters first; of the pieces the few largest sizes come last, the sizes between them are left out."""
    pieces = [cover for cover in candidates if cover.kind.startswith("pieces")]
    others = [cover for cover in candidates if not cover.kind.startswith("pieces")]
    sizes = {0, len(pieces) // 2, len(pieces) - 3, len(pieces) - 2, len(pieces) - 1}
    return others + [cover for k, cover in enumerate(pieces) if k in sizes]


def _largest_dimension(op: SpinOperator, cover: Cover) -> float:
    """Of the largest sector of any cluster, whether or not S^z is conserved."""
    dims = 2 * np.asarray(op.spins) + 1
    largest = max(float(np.prod(dims[list(cluster)])) for cluster in cover.clusters)
    if len(op.symmetry_axes()):
        width = max(np.sqrt(2 * np.pi * (dims[list(c)] ** 2 - 1).sum() / 12) for c in cover.clusters)
        largest /= max(1.0, float(width))
    return largest


def _seconds(piece: SpinOperator, memory: int) -> float:
    if np.prod(2 * piece.spins + 1) <= 256:
        return 0.01
    return estimate_exact(piece, memory=memory).seconds


def _distinct(op: SpinOperator, cover: Cover) -> dict[tuple, tuple[SpinOperator, int]]:
    """Cluster operators that differ, with how often each occurs."""
    counts: Counter[tuple] = Counter()
    found: dict[tuple, SpinOperator] = {}
    for cluster, symbol in zip(cover.clusters, split(op.symbol, cover), strict=True):
        spins = op.spins[list(cluster)]
        order = canonical_order(symbol, spins.tolist())
        ordered = symbol.restricted(order)
        key = (spins[order].tobytes(), *_content(ordered))
        counts[key] += 1
        if key not in found:
            found[key] = SpinOperator(spins[order], ordered)
    return {key: (found[key], count) for key, count in counts.items()}


def _content(symbol: EnergyFunction) -> tuple:
    """What tells clusters apart: equal weights reached on different ways may differ in their last digits."""
    largest = symbol.largest_coefficient
    groups = [
        (g.key, g.sites.tobytes(), (np.round(g.coefficients / largest / _DIGITS) + 0.0).tobytes())
        for g in symbol.groups
    ]
    return f"{largest:.13e}", *groups
