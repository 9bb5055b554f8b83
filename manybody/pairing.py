"""One energy function, both branches: parts of a point computed and put together under the names of the dataset.

A point is an energy function f, a spin and a rule. Its work falls into parts, so that what does not depend on spin or
rule is done once:

    classical   f                      minimum, proof, distinct minima
    harmonic    f, rule                first quantum correction and the minimum it selects
    quantum     f, spin, rule          ground energy with error
    bounds      f, spin, rule          the other rungs of the energy ladder

Every part is a pure function of its arguments and returns a flat dict: names of the dataset's variables where the
number is a result, other names for what later parts need. A rung that cannot be had is left out and its reason goes
into a message.
"""

import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from manybody.model.energy import EnergyFunction
from manybody.model.quantization import quantize

PARTS = ("classical", "harmonic", "quantum", "bounds")
KEPT_NUMBERS = 4_000_000
"""Distinct minima are handed on up to this many components in all: the lowest ones first."""


@dataclass(frozen=True)
class ClassicalSettings:
    """starts: random starts of the minimizer; seed: of its random numbers."""

    starts: int = 64
    seed: int = 1

    def __post_init__(self):
        if self.starts < 1 or self.seed < 0:
            raise ValueError(f"starts must be at least 1 and seed at least 0, got {self.starts} and {self.seed}")


def classical_part(f: EnergyFunction, settings: ClassicalSettings | None = None, report=None) -> dict:
    """Classical minimum with its proof or best lower bound.

    Beside dataset variables: `configuration` (N, 3), `minima` (M, N, 3) distinct minima from the lowest up with
    `minima_energies` (M,) and `minima_counts` (M,) how often each was reached.
    """
    settings = settings or ClassicalSettings()
    from manybody.classical.search import find_ground_state

    began = time.perf_counter()
    found = find_ground_state(f, starts=settings.starts, seed=settings.seed, report=report)
    result, proof = found.result, found.certificate
    kept = result.minima[: max(1, KEPT_NUMBERS // (3 * f.sites))]
    return {
        "classical_energy": result.energy,
        "classical_energy_bound": proof.bound,
        "classical_certified": proof.certified,
        "classical_bound_method": proof.method,
        "classical_mean": f.mean,
        "classical_minima": len(result.minima),
        "classical_starts": result.starts_used,
        "classical_gradient_norm": result.gradient_norm,
        "classical_converged": result.converged,
        "classical_message": found.message,
        "configuration": result.configuration,
        "minima": np.array([m.configuration for m in kept]),
        "minima_energies": np.array([m.energy for m in kept]),
        "minima_counts": np.array([m.count for m in kept]),
        "classical_seconds": time.perf_counter() - began,
    }


def harmonic_part(f: EnergyFunction, rule: str, classical: dict) -> dict:
    """Coefficient e_1 of the first quantum correction, least over tied minima, and the minimum that has it.

    Beside dataset variables: `selected` (N, 3). Where e_1 cannot be had: `harmonic_message` alone, and the classical
    minimum as `selected`. A search among ties that was cut short is told in `harmonic_message`, too.
    """
    from manybody.classical.harmonic import HarmonicTrouble, harmonic_correction

    began = time.perf_counter()
    try:
        correction = harmonic_correction(f, classical["minima"], rule)
    except HarmonicTrouble as trouble:
        part = {"harmonic_message": str(trouble), "selected": classical["configuration"]}
    else:
        part = {
            "harmonic_coefficient": correction.e1,
            "harmonic_spread": correction.spread,
            "harmonic_zero_modes": correction.zero_modes,
            "selected": correction.configuration,
        }
        if not correction.exhausted:
            part["harmonic_message"] = (
                f"only {correction.evaluations} of the configurations that tie were compared: one may have a lower e_1"
            )
    return part | {"harmonic_seconds": time.perf_counter() - began}


def quantum_part(
    f: EnergyFunction,
    spin: float,
    rule: str,
    settings,
    classical: dict,
    harmonic: dict,
    progress: Callable[[dict], None] | None = None,
    checkpoint=None,
) -> dict:
    """Quantum ground energy with error, diagnostics and observables beside their classical counterparts.

    settings: manybody.quantum.result.QuantumSettings. Raises UndefinedQuantization where the rule has no operator.
    """
    from manybody.quantum.ground_state import ground_state

    began = time.perf_counter()
    op = quantize(f, spin, rule)
    scale = abs(classical["classical_energy"] - classical["classical_mean"])
    start = harmonic["selected"]
    state = ground_state(op, settings, start=start, scale=scale, progress=progress, checkpoint=checkpoint)
    part = {
        "status": state.status,
        "message": state.advice,
        "quantum_energy": state.energy,
        "quantum_energy_error": state.error,
        "quantum_method": state.method,
        "sector": state.sector,
        "bond_dimension": state.bond_dimension,
        "discarded_weight": state.discarded_weight,
        "energy_variance": state.energy_variance,
        "quantum_stop": _stop(state),
    }
    if len(state.trace_energy):
        part |= {
            "trace_bond_dimension": state.trace_bond_dimension,
            "trace_energy": state.trace_energy,
            "trace_variance": state.trace_variance,
            "trace_discarded_weight": state.trace_discarded_weight,
        }
    return part | _observables(state.observables, start) | {"quantum_seconds": time.perf_counter() - began}


def bounds_part(f: EnergyFunction, spin: float, rule: str, settings, classical: dict, harmonic: dict) -> dict:
    """Rigorous bounds, the best product state and the best coherent state.

    Raises UndefinedQuantization where the rule has no operator.
    """
    from manybody.classical.clusters import norm_bound
    from manybody.classical.search import find_ground_state
    from manybody.quantum.bounds import cluster_bound
    from manybody.quantum.product_state import product_energy

    began = time.perf_counter()
    op = quantize(f, spin, rule)
    starts = np.concatenate([harmonic["selected"][None], classical["minima"]])
    part, messages = {}, []
    lower, upper = op.lower_symbol(), op.upper_symbol()
    # Both symbols are close to f, whose minima are among the starts: a few random ones suffice beside them.
    if _multiple(f, lower) is not None:
        coherent = classical["configuration"]
        part["coherent_energy"] = float(lower.value(coherent))
    else:
        found = find_ground_state(lower, starts=8, extra_starts=starts, prove=False).result
        coherent = found.configuration
        part["coherent_energy"] = found.energy
    rigorous = classical["classical_bound_method"] != "clusters_searched"
    if rigorous and (multiple := _multiple(f, upper)) is not None:
        factor, shift, slack = multiple
        part["upper_symbol_energy"] = float(factor * classical["classical_energy_bound"] + shift - slack)
        part["upper_symbol_certified"] = classical["classical_certified"]
    elif rigorous:
        proof = find_ground_state(upper, starts=8, extra_starts=starts).certificate
        if proof.rigorous:
            part["upper_symbol_energy"] = proof.bound
            part["upper_symbol_certified"] = proof.certified
    # Where the bound of f itself rests on searched clusters, that of a symbol with the same terms would, too.
    if "upper_symbol_energy" not in part:
        part["upper_symbol_energy"] = norm_bound(upper)
        part["upper_symbol_certified"] = False
        messages.append("the upper symbol is bounded by the norms of its terms only")
    product = product_energy(op, np.concatenate([coherent[None], starts]))
    part["product_energy"] = product.energy
    if not product.converged:
        messages.append("the product state did not converge")
    try:
        clusters = cluster_bound(op, memory=settings.memory)
    except ValueError as reason:
        messages.append(str(reason))
    else:
        part["cluster_bound"] = clusters.value
        part["cluster_bound_kind"] = clusters.kind
    part["bounds_message"] = "; ".join(messages)
    return part | {"bounds_seconds": time.perf_counter() - began}


def assemble(spin: float, classical: dict, harmonic: dict, quantum: dict, bounds: dict) -> dict:
    """One record's variables from its finished parts; a part that failed or is missing is an empty dict."""
    record = {**classical, **harmonic, **bounds, **quantum}
    if "harmonic_coefficient" in harmonic and classical:
        record["harmonic_energy"] = classical["classical_energy"] + harmonic["harmonic_coefficient"] / spin
    if "configuration" in classical:
        record["classical_configuration"] = classical["configuration"]
    if "selected" in harmonic:
        record["selected_configuration"] = harmonic["selected"]
    record["seconds"] = sum(
        part.get(f"{name}_seconds", 0.0) for name, part in zip(PARTS[1:], (harmonic, quantum, bounds))
    )
    return record


def _multiple(f: EnergyFunction, g: EnergyFunction) -> tuple[float, float, float] | None:
    """(factor, shift, slack) with |g - (factor f + shift)| <= slack everywhere, slack being rounding; None if not so.

    Symbols of pair exchange are multiples of f, and the upper symbol under toeplitz is f: its minima need no search.
    """
    terms, others = ([group for group in h.groups if any(group.ranks)] for h in (f, g))
    if [t.key for t in terms] != [t.key for t in others]:
        return None
    if any(not np.array_equal(t.sites, o.sites) for t, o in zip(terms, others, strict=True)):
        return None
    largest = [max((float(np.abs(t.coefficients).max()) for t in some), default=1.0) for some in (others, terms)]
    factor = largest[0] / largest[1]
    difference = sum(float(np.abs(o.coefficients - factor * t.coefficients).sum()) for t, o in zip(terms, others))
    size = sum(float(np.abs(o.coefficients).sum()) for o in others)
    if not difference <= 1e-13 * size:
        return None
    # |C_kq| <= 1, so the sum over coefficients bounds the difference of the functions.
    shift = g.mean - factor * f.mean
    return factor, shift, difference + 4 * np.finfo(float).eps * (size + abs(g.mean) + abs(factor * f.mean))


def _stop(state) -> str:
    if state.converged:
        return "accuracy"
    if state.hit_memory_limit:
        return "memory"
    return "max_bond" if state.hit_bond_limit else "sweeps"


def _observables(found: dict, n: np.ndarray) -> dict:
    """Observables under the dataset's names, beside the classical values of configuration n (N, 3)."""
    part = {}
    if "entanglement" in found:
        part["entanglement_entropy"] = found["entanglement"]
        part["entanglement_order"] = found["entanglement_order"]
    if "coherent_overlap" in found:
        part["overlap_per_site"] = float(found["coherent_overlap"])
    if "moments" in found:
        part |= {"quantum_moment": found["moments"], "classical_moment": n}
    if "correlations" in found:
        quantum = np.einsum("ijaa->ija", found["correlations"])
        classical = np.einsum("ia,ja->ija", n, n)
        different = ~np.eye(len(n), dtype=bool)
        difference = (quantum.sum(axis=2) - classical.sum(axis=2))[different]
        part |= {
            "quantum_correlation": quantum.sum(axis=2),
            "classical_correlation": classical.sum(axis=2),
            "quantum_correlation_component": quantum,
            "classical_correlation_component": classical,
        }
        if len(difference):
            part["correlation_difference"] = float(np.sqrt(np.mean(difference**2)))
    return part
