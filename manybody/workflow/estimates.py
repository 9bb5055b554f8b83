"""Time and memory a part is expected to take, before anything of the study has been measured.

The scaling with size, spin and bond dimension is what matters here; the speed of the machine is calibrated away by
costs.CostModel. Where exact diagonalization is in question, the quantum branch's own count of states is asked.
"""

from __future__ import annotations

import functools
import math

from manybody.model.lattice import DIMENSIONS
from manybody.workflow.document import Settings
from manybody.workflow.points import Cluster, Point, TermRecipe

SMALL = 3000  # dimension of the whole space below which every solve is quick and small
HUGE = 1e11  # and above which no sector can be diagonalized
HALF_SWEEPS = 14  # half sweeps at the usual bond dimension that cost as much as a whole run with its growing bonds
USUAL_BOND = 100  # bond dimension that the usual accuracy takes, over (1 + S) and the couplings cut
LIBRARIES = 5e7  # bytes a first solve may add by loading compiled code


def classical(cluster: Cluster, settings: Settings) -> tuple[float, float]:
    """(seconds, bytes) of minimum and proof: batches of starts over the couplings, and one 3N x 3N eigenproblem."""
    n, couplings = cluster.sites, cluster.couplings
    seconds = 5e-3 + settings.starts * 300 * (2e-7 * n + 5e-8 * couplings) + 3e-9 * min(3.0 * n, 3000.0) ** 3
    return seconds, LIBRARIES + settings.starts * n * 3 * 8 * 40 + 8 * 3 * min(3.0 * n, 6000.0) ** 2


def harmonic(cluster: Cluster, settings: Settings) -> tuple[float, float]:
    """(seconds, bytes) of the symplectic eigenvalues at up to sixteen minima."""
    n = cluster.sites
    return 2e-3 + 16 * 1e-8 * (2.0 * n) ** 3, LIBRARIES + 8 * 8 * (2.0 * n) ** 2


def bounds(point: Point, settings: Settings) -> tuple[float, float]:
    """(seconds, bytes) of symbols, product state and small clusters."""
    n, levels = point.cluster.sites, 2 * point.spin + 1
    seconds, size = classical(point.cluster, settings)
    seconds = 0.02 + 0.5 * seconds + 30 * n * levels**2 * 1e-6 + 1e-9 * min(levels, 300.0) ** 3
    return seconds, size + 64 * n * levels**2


def quantum(point: Point, settings: Settings) -> tuple[str, float, float]:
    """("exact" or "sweeps", seconds, bytes) of the ground state."""
    log10 = point.log10_dimension
    if log10 <= math.log10(SMALL):
        dimension = 10**log10
        return "exact", 3e-3 + 2e-10 * dimension**2.5, LIBRARIES + 16 * 3 * min(dimension, 300.0) ** 2 + 1e4 * dimension
    if log10 <= math.log10(HUGE):
        cost = _exact(_AsKind(point), settings.memory, bool(settings.observables))
        if cost is not None:
            return "exact", cost[0], LIBRARIES + cost[1]
    return "sweeps", *_sweeps(_AsKind(point), settings.max_bond, settings.memory)


class _AsKind:
    """A point that compares equal to those of the same structure: the same lattice, spin and rule, and couplings that
    are zero, or equal to each other, at the same places. Counting states costs milliseconds and gives the same for all.
    """

    def __init__(self, point: Point):
        self.point = point
        recipe = point.cluster.recipe
        if isinstance(recipe, TermRecipe):
            lattice = recipe.lattice
            terms = tuple((term.kind, term.where, _pattern(term.values), _pattern(term.axis)) for term in recipe.terms)
            where = (lattice.shape, lattice.extent, lattice.periodic, id(lattice.table), terms)
        else:
            where = (recipe.key,)
        self.key = (*where, point.spin, point.rule)

    def __eq__(self, other):
        return self.key == other.key

    def __hash__(self):
        return hash(self.key)


def _pattern(values) -> tuple:
    if isinstance(values, str):
        return (values,)
    return tuple(0 if value == 0 else 1 + values.index(value) for value in values)


@functools.lru_cache(maxsize=4096)
def _exact(kind: _AsKind, memory: int, observables: bool) -> tuple[float, float] | None:
    """(seconds, bytes) of exact diagonalization, None where it is out of reach."""
    from manybody.model.quantization import quantize
    from manybody.quantum.ground_state import estimate
    from manybody.quantum.result import QuantumSettings

    point = kind.point
    cost = estimate(quantize(point.cluster.build().energy, point.spin, point.rule), QuantumSettings(memory=memory))
    if not math.isfinite(cost.seconds):
        return None
    return cost.seconds, float(cost.bytes)


@functools.lru_cache(maxsize=4096)
def _sweeps(kind: _AsKind, max_bond: int, memory: int) -> tuple[float, float]:
    """(seconds, bytes) of matrix-product sweeps: bytes at the largest bond dimension allowed, as the quantum branch
    predicts them, seconds at the one that the usual accuracy takes, growing with spin and with the width of the cluster
    (within a factor of three for chains, rings and cylinders of 16 to 200 sites and spins 1/2 to 5).
    """
    from manybody.model.quantization import quantize
    from manybody.quantum.result import QuantumSettings
    from manybody.quantum.sweeps import predict

    point = kind.point
    operator = quantize(point.cluster.build().energy, point.spin, point.rule)
    size = predict(operator, QuantumSettings(max_bond=max_bond, memory=memory)).bytes
    usual = min(max_bond, math.ceil(USUAL_BOND * (1 + point.spin) * _bonds_cut(point.cluster)))
    half_sweep = predict(operator, QuantumSettings(max_bond=usual, memory=memory)).seconds
    return HALF_SWEEPS * half_sweep, LIBRARIES + size


def _bonds_cut(cluster: Cluster) -> float:
    """Couplings that a cut across the longest direction crosses, about: they make the channels of the operator."""
    n, recipe = cluster.sites, cluster.recipe
    each = max(1.0, cluster.couplings / n)
    if not isinstance(recipe, TermRecipe):
        return each * math.sqrt(n)
    lattice = recipe.lattice
    if lattice.shape in ("complete", "star", "bipartite"):
        return 1.0  # every site couples to the same sum over others
    if not lattice.cell:
        return each * math.sqrt(n)
    return max(1.0, each / DIMENSIONS.get(lattice.shape, 1) * n / max(lattice.extent))
