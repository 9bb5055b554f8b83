"""A run in the middle of its sweeps as plain arrays, and back."""

import json
from collections.abc import Callable
from dataclasses import astuple

import numpy as np

from manybody.quantum.chain import Bond, Chain
from manybody.quantum.extrapolation import Stage
from manybody.quantum.matrix_product_state import MatrixProductState, arrays_of, state_of
from manybody.quantum.problem import Problem
from manybody.quantum.saved_states import text_array
from manybody.quantum.schedule import Run

FACTS = (
    "allowed", "sweeps", "bounded", "narrow", "ceiling", "vectors", "under_way", "energies", "site", "lost", "cut",
    "before", "unmixings",
)  # fmt: skip


def run_arrays(run: Run, problem: Problem) -> dict[str, np.ndarray]:
    """Everything of a run at one of its pauses. The run is not changed and the centre not moved: that is left to
    whoever takes it up."""
    chain = run.chain
    bonds, tensors, local = chain.bonds, [chain.tensor(site) for site in range(chain.length)], chain.local
    if chain.reverse:
        bonds = [bond.mirrored(chain.total) for bond in reversed(bonds)]
        tensors = [chain.turned_tensor(site) for site in reversed(range(chain.length))]
        local = local[::-1]
    bonds = [Bond(bond.charges, bond.dims) for bond in bonds]
    state = MatrixProductState(
        problem.order, problem.operator.spins, problem.frames, list(local), bonds, tensors, chain.total
    )
    facts = {name: getattr(run, name) for name in FACTS}
    facts |= {"reverse": chain.reverse, "stages": [astuple(stage) for stage in run.stages]}
    return arrays_of(state) | {"facts": text_array(json.dumps(facts))}


def restored_run(
    arrays: dict[str, np.ndarray],
    problem: Problem,
    begin: Callable[[Chain], Run],
) -> tuple[Run, Problem] | None:
    """The run, and the problem with as many levels as it has; None where its frames are not those of the problem.

    begin: makes a Run of a chain.
    """
    state = state_of(arrays)
    if not (np.array_equal(state.order, problem.order) and np.allclose(state.frames, problem.frames)):
        return None
    levels = np.array([local.size for local in state.local])
    if not np.array_equal(levels, problem.levels):
        problem = problem.with_levels(levels)
    facts = json.loads(arrays["facts"].tobytes())
    chain = Chain(list(problem.local), list(problem.sites), state.bonds, state.tensors, state.total)
    if facts.pop("reverse"):
        chain.mirror()
    chain.prepare()
    run = begin(chain)
    run.stages = [Stage(*row) for row in facts.pop("stages")]
    for name, value in facts.items():
        setattr(run, name, value)
    for site in range(run.site):
        chain.shift(site)
        chain.advance(site)
    return run, problem
