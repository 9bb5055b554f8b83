"""The ground state of any quantized operator: which method, cluster by cluster, and one result with a verdict."""

import functools
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from manybody.model.energy import EnergyFunction, Group
from manybody.model.quantization import SpinOperator
from manybody.quantum.basis import TooLarge
from manybody.quantum.exact import LARGEST_DIMENSION, Estimate, estimate_exact, exact_ground_state
from manybody.quantum.result import GroundState, QuantumSettings
from manybody.quantum.saved_states import SavedStates, open_states, owner

_SMALL = 14
"""Spaces below 2 to this power need no estimate."""


def ground_state(
    op: SpinOperator,
    settings: QuantumSettings | None = None,
    start: np.ndarray | None = None,
    scale: float = 0.0,
    progress: Callable[[dict], None] | None = None,
    checkpoint=None,
) -> GroundState:
    """Ground state of an operator: exact where dimension and settings.memory allow it, else as a matrix-product state.

    start (N, 3): classical unit vectors. scale: |f_min - f_mean|, to which settings.accuracy is relative; 0 takes a
    norm bound of the operator. progress(dict) is called now and then. checkpoint: where the state of a long run is
    kept and taken up again, a path or an object as saved_states.Checkpoint says.

    Clusters without coupling between them are solved apart, equal ones once; energies, errors and sectors add. The
    sector is then that of one state in a possibly degenerate ground space. Clusters found done in a checkpoint come
    without their states (None in ClusterStates). Raises ValueError for a start of the wrong shape or couplings that
    overflow.
    """
    settings = settings or QuantumSettings()
    if start is not None:
        start = np.asarray(start, dtype=float)
        if start.shape != (op.sites, 3):
            raise ValueError(f"start must be unit vectors of shape ({op.sites}, 3), got {start.shape}")
    op = without_scalars(op)
    saved = open_states(checkpoint)
    saved.claim(owner(op, settings, scale))
    parts = op.symbol.components()
    if len(parts) == 1:
        result = _connected(op, settings, start, scale, progress, saved)
    else:
        result = _separate(op, parts, settings, start, scale, progress, saved)
    saved.finish()
    return result


def _separate(op, parts, settings, start, scale, progress, saved: SavedStates) -> GroundState:
    known: dict[tuple, GroundState] = {}
    results = []
    # Correlations between clusters are products of moments.
    needed = (*settings.observables, "moments") if "correlations" in settings.observables else settings.observables
    inner = replace(settings, observables=tuple(dict.fromkeys(needed)))
    for number, sites in enumerate(parts):
        piece = op.restricted(sites)
        key = (piece.spins.tobytes(), piece.symbol.fingerprint())
        if key not in known:
            direction = None if start is None else start[sites]
            told = progress and functools.partial(_of_cluster, progress, f"{number + 1} of {len(parts)}")
            known[key] = _cluster(piece, inner, direction, scale, told, saved.within(f"cluster{number}"))
        results.append(known[key])
    return _together(op, parts, results)


def estimate(op: SpinOperator, settings: QuantumSettings | None = None) -> Estimate:
    """Cost of the exact solves of an operator, cluster by cluster: seconds add, the largest dimension and bytes count.

    seconds is infinite where a cluster is beyond exact diagonalization.
    """
    settings = settings or QuantumSettings()
    op = without_scalars(op)
    known: dict[tuple, Estimate] = {}
    for sites in op.symbol.components():
        piece = op.restricted(sites)
        key = (piece.spins.tobytes(), piece.symbol.fingerprint())
        if key not in known:
            known[key] = estimate_exact(piece, memory=settings.memory)
    costs = list(known.values())
    largest = max(costs, key=lambda cost: cost.dimension)
    seconds = sum(cost.seconds if _affordable(cost, settings) else np.inf for cost in costs)
    return replace(largest, seconds=seconds, bytes=max(cost.bytes for cost in costs))


def without_scalars(op: SpinOperator) -> SpinOperator:
    """The same operator with its rank-0 factors read as numbers: they link no sites and belong into the constant."""
    symbol = op.symbol
    constant, groups = symbol.constant, []
    for group in symbol.groups:
        if any(group.ranks):
            groups.append(Group(tuple((k, d) if k else (0, 0) for k, d in group.key), group.sites, group.coefficients))
        else:
            constant += float(group.coefficients.sum())
    return SpinOperator(op.spins, EnergyFunction(symbol.sites, constant, groups))


def _affordable(cost: Estimate, settings: QuantumSettings) -> bool:
    return cost.dimension <= LARGEST_DIMENSION and cost.bytes <= settings.memory


def _of_cluster(progress: Callable[[dict], None], which: str, facts: dict) -> None:
    progress({"cluster": which, **facts})


def _cluster(op, settings, start, scale, progress, saved: SavedStates) -> GroundState:
    """Ground state of one cluster among several, or what an earlier run found for it."""
    if done := saved.get("result"):
        return GroundState.from_arrays(done)
    result = _connected(op, settings, start, scale, progress, saved.within("solve"))
    saved.drop("solve")
    saved.put("result", result.to_arrays)
    saved.pause()
    return result


def _connected(op, settings, start, scale, progress, saved: SavedStates) -> GroundState:
    small = np.sum(np.log2(2 * op.spins + 1)) < _SMALL
    if small or _affordable(estimate_exact(op, memory=settings.memory), settings):
        try:
            return exact_ground_state(op, settings, start, scale, progress, saved.within("exact"))
        except TooLarge:
            saved.drop("exact")  # very unequal spins: the tables of a half do not fit although the sector does
    from manybody.quantum.sweeps import matrix_product_ground_state

    return matrix_product_ground_state(op, settings, start, scale, progress, saved)


@dataclass(frozen=True)
class ClusterStates:
    """States of clusters without coupling between them; their tensor product is the state of the whole."""

    sites: tuple[np.ndarray, ...]
    states: tuple


def _together(op: SpinOperator, parts: list[np.ndarray], results: list[GroundState]) -> GroundState:
    axes = op.symmetry_axes()
    sector = sum(result.sector for result in results) if len(axes) else float("nan")
    axis = np.full(3, np.nan)
    if len(axes):
        axis = np.array([0.0, 0.0, 1.0]) if len(axes) == 3 else axes[0]
    energies = sum(result.energy for result in results) + op.symbol.constant
    waste = abs(op.symbol.constant) * np.finfo(float).eps
    open_ones = [result for result in results if not result.converged]
    advice = "; ".join(dict.fromkeys(result.advice for result in open_ones))
    traced = max(results, key=lambda result: len(result.trace_energy) and result.error)
    return GroundState(
        energy=float(energies),
        error=float(sum(result.error for result in results) + waste),
        status="not_converged" if open_ones else "converged",
        advice=advice,
        method="exact" if all(result.method == "exact" for result in results) else "matrix_product",
        sector=float(sector),
        sector_axis=axis,
        bond_dimension=max(result.bond_dimension for result in results),
        discarded_weight=float(sum(result.discarded_weight for result in results)),
        energy_variance=float(sum(result.energy_variance for result in results)),
        trace_bond_dimension=traced.trace_bond_dimension,
        trace_energy=traced.trace_energy + (energies - traced.energy),
        trace_variance=traced.trace_variance,
        trace_discarded_weight=traced.trace_discarded_weight,
        observables=_joined(op.sites, parts, results),
        state=ClusterStates(tuple(parts), tuple(result.state for result in results)),
        hit_bond_limit=any(result.hit_bond_limit for result in results),
        hit_memory_limit=any(result.hit_memory_limit for result in results),
    )


def _joined(total: int, parts: list[np.ndarray], results: list[GroundState]) -> dict[str, np.ndarray]:
    """Observables of the product of cluster states, sites numbered as in the whole."""
    observables = {}
    names = set(results[0].observables)
    if "moments" in names:
        moments, squared = np.zeros((total, 3)), np.zeros((total, 3, 3))
        for sites, result in zip(parts, results, strict=True):
            moments[sites] = result.observables["moments"]
            squared[sites] = result.observables["moments_squared"]
        observables["moments"], observables["moments_squared"] = moments, squared
    if "correlations" in names:
        single = np.zeros((total, 3))
        for sites, result in zip(parts, results, strict=True):
            single[sites] = result.observables["moments"]
        # Sites of different clusters are uncorrelated: the mean of the product is the product of the means.
        correlations = np.einsum("ia,jb->ijab", single, single)
        for sites, result in zip(parts, results, strict=True):
            correlations[np.ix_(sites, sites)] = result.observables["correlations"]
        observables["correlations"] = correlations
    if "entanglement" in names:
        entropies = [result.observables["entanglement"] for result in results]
        joints = [array for entropy in entropies for array in (entropy, np.zeros(1))]
        observables["entanglement"] = np.concatenate(joints[:-1])
        observables["entanglement_order"] = np.concatenate(
            [sites[result.observables["entanglement_order"]] for sites, result in zip(parts, results, strict=True)]
        )
    if "coherent_overlap" in names:
        logs = [
            len(sites) * np.log(max(float(r.observables["coherent_overlap"]), 1e-300))
            for sites, r in zip(parts, results)
        ]
        observables["coherent_overlap"] = np.array(np.exp(sum(logs) / total))
    return observables
