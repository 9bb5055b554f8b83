"""The ground state of any quantized operator as a matrix-product state."""

import functools
from collections.abc import Callable
from pathlib import Path

import numpy as np

from manybody.model.quantization import SpinOperator
from manybody.quantum import matrix_product_state, memory, spin_flip, variance
from manybody.quantum.chain import Chain
from manybody.quantum.local_basis import enlarge, wanted_levels
from manybody.quantum.problem import Problem, prepare
from manybody.quantum.result import GroundState, QuantumSettings
from manybody.quantum.saved_run import restored_run, run_arrays
from manybody.quantum.saved_states import Checkpoint, SavedStates, open_states, owner
from manybody.quantum.schedule import Limits, Run
from manybody.quantum.sectors import SectorSearch, isotropic_directions, start_chain
from manybody.quantum.start_state import classical_start

STAGES = {"sector": "search for the sector", "run": "main run", "parity": "other parity", "guard": "guard run"}
"""What a solve goes through, by the names of its saved states."""
MIXED = 1e-3
"""A state of S^z = 0 whose overlap with its turned-over self misses 1 by more than this is a mixture of both
parities."""
ROOM = 1.4
"""A part of one parity may take so many times the states of the mixture."""
LEAST_NORM = 1e-100
"""Couplings of a smaller sum, or of one beyond its inverse, are refused: variances are energies squared."""
NOTABLE = 0.05
"""A mixture is undone if that lowers the energy by this share of its error."""


def matrix_product_ground_state(
    op: SpinOperator,
    settings: QuantumSettings | None = None,
    start: np.ndarray | None = None,
    scale: float = 0.0,
    progress: Callable[[dict], None] | None = None,
    checkpoint: Checkpoint | SavedStates | str | Path | None = None,
) -> GroundState:
    """Lowest energy found by sweeps, its error and what stopped them.

    start (N, 3): classical unit vectors, found here by a short descent if None. scale: |f_min - f_mean|, to which
    settings.accuracy is relative; 0 takes a bound on the norm of the operator. progress: called with a dict after every
    half sweep: stage (one of STAGES), sweep, bond_dimension, energy, variance, discarded_weight, sector. checkpoint:
    where the solve keeps how far it is and takes it up again, whatever it was at, see saved_states; a path is written
    every two minutes and removed in the end. Raises ValueError for couplings whose squares are beyond the numbers of a
    machine (LEAST_NORM).
    """
    settings = settings or QuantumSettings()
    saved = checkpoint if isinstance(checkpoint, SavedStates) else open_states(checkpoint)
    saved.claim(owner(op, settings, scale))
    result = _Solver(op, settings, start, scale, progress, saved).solve()
    if saved is not checkpoint:
        saved.finish()
    return result


def predict(op: SpinOperator, settings: QuantumSettings | None = None) -> memory.Estimate:
    """Bytes at the peak of a solve and seconds of one half sweep at the bond dimension the limits allow (a solve takes
    some tens of half sweeps, most of them at smaller bonds). An accuracy that is reached earlier costs less."""
    settings = settings or QuantumSettings()
    up = np.tile([0.0, 0.0, 1.0], (op.sites, 1))
    problem = prepare(op, up)
    vectors = products_per_step(problem)
    bond = min(settings.max_bond, memory.largest_bond(problem, settings.memory, vectors))
    return memory.estimate(problem, bond, vectors)


def products_per_step(problem: Problem) -> int:
    """Lanczos products of one step: the spread of energies over their spacing grows with the spin, but more than six
    never paid, nor more than three where sites are solved in pairs."""
    return 3 if memory.pairs(problem) else int(np.clip(3 + round(float(problem.spins.max())), 3, 6))


class _Solver:
    def __init__(self, op, settings: QuantumSettings, start, scale: float, progress, saved: SavedStates):
        self.op, self.settings, self.progress, self.saved = op, settings, progress, saved
        self.rng = np.random.default_rng(settings.seed)
        self.start = classical_start(op, self.rng) if start is None else np.asarray(start, float)
        self.problem = prepare(op, self.start)
        self.isotropic = len(op.symmetry_axes()) == 3
        self.vectors = products_per_step(self.problem)
        norm = self.problem.norm
        if not (norm == 0 or LEAST_NORM < norm < 1 / LEAST_NORM):
            raise ValueError(
                f"the couplings add up to {norm:.3g}, whose square is beyond the numbers of a machine: choose a unit "
                f"of energy that brings them between {LEAST_NORM:.0e} and {1 / LEAST_NORM:.0e}"
            )
        largest = memory.largest_bond(self.problem, settings.memory, self.vectors)
        scale = scale if scale > 0 else norm
        self.limits = Limits(
            goal=settings.accuracy * scale,
            bond=settings.max_bond,
            memory_bond=largest,
            floor=1e-14 * (norm + abs(self.problem.constant)) + 1e-300,
            norm=max(norm, 1e-300),
            vectors=self.vectors,
            pairs=memory.pairs(self.problem),
        )

    def solve(self) -> GroundState:
        if self.op.sites == 1:
            return self._single()
        # What is found of a later stage tells that the earlier ones are done.
        run = self._taken_up("run") or self._kept("run", self._chosen())
        self.saved.drop("sector")
        guard = self._taken_up("guard")
        if guard is None:
            run = self._kept("run", self._lower_parity(run))
            self.saved.drop("parity")
        other = self._guard(run, guard)
        if other.energy < run.energy - max(run.error, self.limits.floor):
            self._finish(other)
            if other.energy < run.energy:
                run, other = other, run
        return self._result(run, other)

    def _directions(self, start: np.ndarray) -> np.ndarray:
        directions = self.problem.directions(start)
        return isotropic_directions(directions, self.problem.spins, self._sharp) if self.isotropic else directions

    @property
    def _sharp(self) -> bool:
        """A collinear order of small spins starts from a basis state: sweeps of pairs leave it at once."""
        values = np.linalg.svd(self.start, compute_uv=False)
        collinear = len(values) < 2 or values[1] < 1e-6 * values[0]
        along = self.isotropic or np.abs(self.problem.directions(self.start)[:, 2]).min() > 0.9
        return self.limits.pairs and bool(self.problem.spins.max() <= 1) and collinear and along

    def _begin(self, total: int) -> Run:
        """The run of a sector, as it was left or from its start state."""
        name = f"sector/{total}"
        return self._taken_up(name) or self._kept(
            name, self._run(start_chain(self.problem, self._directions(self.start), total, self._sharp))
        )

    def _run(self, chain: Chain) -> Run:
        return Run(chain, self.limits, self.settings.seed, pause=self.saved.pause)

    def _kept(self, name: str, run: Run) -> Run:
        """The run, which from now on is saved under a name and reports as what it is."""
        self.saved.put(name, lambda: run_arrays(run, self.problem))
        run.report = self._reporter(STAGES[name.partition("/")[0]], run.chain.total)
        return run

    def _taken_up(self, name: str) -> Run | None:
        """A saved run; None where there is none or it belongs to other frames."""
        arrays = self.saved.get(name)
        found = arrays and restored_run(arrays, self.problem, self._run)
        if not found:
            return None
        run, self.problem = found
        return self._kept(name, run)

    def _reporter(self, stage: str, total: int):
        if self.progress is None:
            return None
        sector = self._sector(total)
        shift = self.problem.constant
        return lambda facts: self.progress(
            {"stage": stage, **facts, "energy": facts["energy"] + shift, "sector": sector}
        )

    def _sector(self, total: int) -> float:
        return float(total - self.problem.spins.sum()) if self.problem.conserved else float("nan")

    def _chosen(self) -> Run:
        """The run of the right sector, after a few cheap stages."""
        if not self.problem.conserved:
            return self._begin(0)
        whole = round(2 * self.problem.spins.sum())
        half = self.problem.spins.sum()
        directions = self._directions(self.start)
        moment = float(self.problem.spins @ directions[:, 2])
        first = round(half + moment + 1e-6)
        if self.isotropic and first <= half + 0.5:
            # Every multiplet has a state of S^z = 0 or 1/2: no other sector can be lower.
            return self._begin(int(np.ceil(half)))
        search = SectorSearch(self._begin, int(np.ceil(half)) if self.flips else 0, whole, self.isotropic)
        best = search.search(first)
        rivals = search.undecided(best)
        depth = 1 + search.stages
        while rivals:
            contenders = {total: search.runs[total] for total in (best, *rivals)}
            open_runs = [run for run in contenders.values() if not run.finished and run.error > self.limits.goal]
            if not open_runs:
                break
            depth += 1
            for run in open_runs:
                # One that was taken up may be ahead already.
                if len(run.stages) < depth:
                    run.advance()
            lowest = min(run.energy for run in contenders.values())
            rivals = [t for t, run in contenders.items() if run.energy - run.error <= lowest]
            equal = [t for t in rivals if contenders[t].energy <= lowest + self.limits.goal]
            # Within the wanted accuracy the least entangled state is as good as any.
            best = max(equal, key=lambda t: (abs(t - half), -t))
            rivals = [t for t in rivals if t != best]
        return search.runs[best]

    @functools.cached_property
    def flips(self) -> bool:
        """A turn by pi about x leaves the solved operator unchanged."""
        turned = self.op.rotated(self.problem.frames).symbol
        flip = np.diag([1.0, -1.0, -1.0])
        return turned.rotated(flip).allclose(turned, 1e-12, 1e-13 * self.problem.norm)

    def _finish(self, run: Run) -> None:
        while True:
            while not run.finished:
                run.advance()
            # Few states cannot hold one parity alone and mix again: hence the limit.
            if run.unmixings < 2 and self._unmixed(run):
                continue
            levels = wanted_levels(run.chain, self.problem, run.limits.goal)
            if levels is None:
                return
            self.problem = self.problem.with_levels(levels)
            run.chain = enlarge(run.chain, self.problem)
            run.stages.clear()
            run.allowed *= 10

    def _has_parity(self, chain: Chain) -> bool:
        central = 2 * chain.total == round(2 * self.problem.spins.sum())
        return self.problem.conserved and central and self.flips

    def _lower_parity(self, run: Run) -> Run:
        """The run, finished, or one of the other spin-flip parity if that ends lower.

        S^z of the first site changes the parity and hardly anything else where nearly free spins sit at the ends. Its
        run is refined until its error puts it above the first one.
        """
        other = self._taken_up("parity")
        if other is None:
            self._finish(run)
            run.chain.rest()
            chain = spin_flip.other_parity(run.chain) if self._has_parity(run.chain) else None
            if chain is None:
                return run
            other = self._kept("parity", self._run(chain))
        other.pursue(lambda: other.energy - other.error <= run.energy)
        if other.energy < run.energy:
            self._finish(other)
        return other if other.energy < run.energy else run

    def _unmixed(self, run: Run) -> bool:
        """Replace a mixture of states of both spin-flip parities by the lower part and sweep once more; whether that
        was needed."""
        chain = run.chain
        if not self._has_parity(chain):
            return False
        if abs(spin_flip.overlap(chain)) > 1 - MIXED:
            return False
        # What is cut here weighs little beside the error of the run, and its bonds hardly grow.
        limit, allowed = int(ROOM * chain.bond_dimension) + 8, 0.01 * run.allowed
        chain.rest()
        parts, energies = [], []
        for sign in (1.0, -1.0):
            parts.append(spin_flip.parity_part(chain, sign, limit, allowed))
            energies.append(variance.at_centre(parts[-1])[0])
            parts[-1].rest()
        if min(energies) > run.energy - max(self.limits.floor, NOTABLE * run.error):
            chain.prepare()
            return False
        run.chain = parts[int(np.argmin(energies))]
        del chain, parts
        run.chain.prepare()
        run.unmixings += 1
        run.repeat()
        return True

    def _guard(self, run: Run, other: Run | None) -> Run:
        """A cheap second run from random directions in the same sector, coarser than the first; `other`, if it is begun
        already."""
        if other is None:
            random = self.rng.standard_normal((self.op.sites, 3))
            random /= np.linalg.norm(random, axis=1, keepdims=True)
            chain = start_chain(self.problem, self.problem.directions(random), run.chain.total)
            other = self._kept("guard", self._run(chain))
        run.chain.rest()
        other.pursue(lambda: 2 * other.chain.bond_dimension <= run.chain.bond_dimension)
        return other

    def _result(self, run: Run, other: Run) -> GroundState:
        problem, last = self.problem, run.stages[-1]
        error = run.error
        goal = max(self.limits.goal, 2 * self.limits.floor)
        hit_bond = run.bounded and error > goal and self.limits.bond <= self.limits.memory_bond
        hit_memory = run.bounded and error > goal and not hit_bond
        advice = ""
        if error > goal:
            advice = f"error {error:.1e} above the wanted {goal:.1e}: "
            if hit_bond:
                advice += f"raise max_bond above {self.settings.max_bond} or loosen accuracy"
            elif hit_memory:
                advice += f"memory limits the bond dimension to {self.limits.memory_bond}: raise it or loosen accuracy"
            else:
                advice += "rounding errors or slow sweeps stopped it; loosen accuracy"
        state = matrix_product_state.of_chain(run.chain, problem.order, self.op.spins, problem.frames)
        observables = {}
        if self.settings.observables:
            from manybody.quantum.matrix_product_observables import matrix_product_observables

            observables = matrix_product_observables(state, self.settings.observables, self.start, self.settings.seed)
        return GroundState(
            energy=last.energy + problem.constant,
            error=error,
            status="not_converged" if advice else "converged",
            advice=advice,
            method="matrix_product",
            sector=self._sector(run.chain.total),
            sector_axis=problem.axis,
            bond_dimension=last.bond_dimension,
            discarded_weight=last.discarded,
            energy_variance=last.variance,
            trace_bond_dimension=np.array([stage.bond_dimension for stage in run.stages]),
            trace_energy=np.array([stage.energy + problem.constant for stage in run.stages]),
            trace_variance=np.array([stage.variance for stage in run.stages]),
            trace_discarded_weight=np.array([stage.discarded for stage in run.stages]),
            observables=observables,
            state=state,
            hit_bond_limit=bool(hit_bond),
            hit_memory_limit=bool(hit_memory),
        )

    def _single(self) -> GroundState:
        from manybody.quantum.operators import sparse_operator

        values = np.linalg.eigvalsh(sparse_operator(self.op).toarray())
        return GroundState(float(values[0]), self.limits.floor, "converged", "", "exact", bond_dimension=1)
