"""Start states for every sector of total S^z, and the search for the sector of the ground state."""

from collections.abc import Callable

import numpy as np
from scipy.optimize import brentq

from manybody.model.spin_matrices import coherent_states
from manybody.quantum.chain import Chain
from manybody.quantum.extrapolation import energy_error
from manybody.quantum.problem import Problem
from manybody.quantum.schedule import Run
from manybody.quantum.start_state import projected_product

SMEAR = 0.97
"""A start along the conserved axis is opened by arccos(SMEAR), so that all charges near the wanted one take part."""

FEW = 8
"""Up to this many steps between the extreme charges, all are tried."""


def start_chain(problem: Problem, directions: np.ndarray, total: int, sharp: bool = False) -> Chain:
    """Chain in a projected coherent product state of the given total charge, ready for sweeps.

    directions (N, 3) in sweep order and solved frame; their z-components are shifted so that the mean charge is the
    wanted one. sharp: a single state of the local basis instead, near the directions; cheaper for small spins, a dead
    end for large ones.
    """
    if problem.conserved and sharp:
        states = basis_state(directions, problem.spins, total)
        amplitudes = [(np.arange(d) == s).astype(float) for d, s in zip(problem.levels.tolist(), states, strict=True)]
    else:
        if problem.conserved:
            directions = magnetized(directions, problem.spins, total - problem.spins.sum())
        amplitudes = []
        for v, spin, levels in zip(directions, problem.spins.tolist(), problem.levels.tolist(), strict=True):
            vector = coherent_states(v, spin)[:levels]
            amplitudes.append(vector / np.linalg.norm(vector))
    bonds, tensors = projected_product(amplitudes, problem.local, total, problem.real)
    chain = Chain(list(problem.local), list(problem.sites), bonds, tensors, total)
    chain.prepare()
    return chain


def basis_state(directions: np.ndarray, spins: np.ndarray, total: int) -> list[int]:
    """Local states (0 is m = S) with sum (S_i + m_i) = total, each m_i as near to S_i z_i as that allows."""
    full = np.round(2 * spins).astype(np.int64)
    wanted = spins * (1 + directions[:, 2])
    raised = np.clip(np.round(wanted), 0, full).astype(np.int64)
    while raised.sum() != total:
        step = 1 if raised.sum() < total else -1
        possible = (raised + step >= 0) & (raised + step <= full)
        cost = np.where(possible, step * (raised + step - wanted), np.inf)
        raised[int(np.argmin(cost))] += step
    return (full - raised).tolist()


def magnetized(directions: np.ndarray, spins: np.ndarray, wanted: float) -> np.ndarray:
    """Directions with azimuths kept and z = tanh(artanh(SMEAR z_i) + t), t such that sum S_i z_i = wanted."""
    largest = spins.sum()
    across = directions[:, :2].copy()
    length = np.linalg.norm(across, axis=1)
    straight = length < 1e-6
    across[straight] = np.stack([np.where(directions[straight, 2] < 0, -1.0, 1.0), np.zeros(straight.sum())], axis=1)
    across /= np.linalg.norm(across, axis=1, keepdims=True)
    if abs(wanted) >= largest - 1e-9:
        z = np.full(len(spins), np.sign(wanted))
    else:
        base = np.arctanh(SMEAR * np.clip(directions[:, 2], -1, 1))
        shift = brentq(lambda t: float(spins @ np.tanh(base + t)) - wanted, -40.0, 40.0)
        z = np.tanh(base + shift)
    return np.concatenate([across * np.sqrt(np.maximum(1 - z * z, 0.0))[:, None], z[:, None]], axis=1)


def isotropic_directions(start: np.ndarray, spins: np.ndarray, upright: bool = False) -> np.ndarray:
    """For models that any common rotation leaves unchanged: turn a configuration so that its moment points along z or,
    without one, so that its spins lie as far as possible in the xy-plane (upright: along z)."""
    moment = spins @ start
    _, _, axes = np.linalg.svd(start * spins[:, None], full_matrices=True)
    z = moment / np.linalg.norm(moment) if np.linalg.norm(moment) > 1e-6 * spins.sum() else axes[2]
    if upright and np.linalg.norm(moment) <= 1e-6 * spins.sum():
        z = axes[0]
    x = axes[0] - (axes[0] @ z) * z
    if np.linalg.norm(x) < 1e-6:
        x = np.eye(3)[np.argmin(np.abs(z))]
        x = x - (x @ z) * z
    x /= np.linalg.norm(x)
    return start @ np.array([x, np.cross(z, x), z]).T


class SectorSearch:
    """Walks over total charges until the lowest energy is bracketed by its neighbours.

    begin(total) makes a Run; every run visited is brought to `stages` stages, and what it had then is compared.
    `undecided` lists runs that a finer solution has to tell apart. multiplets: the total spin is conserved, so that
    energies never fall with growing |S^z|, and equal ones belong to one multiplet; the largest |S^z| of it is taken,
    since its state is the least entangled.
    """

    def __init__(
        self, begin: Callable[[int], Run], lowest: int, highest: int, multiplets: bool = False, stages: int = 2
    ):
        self.begin, self.lowest, self.highest, self.stages = begin, lowest, highest, stages
        self.multiplets = multiplets
        self.runs: dict[int, Run] = {}

    def run(self, total: int) -> Run:
        if total not in self.runs:
            run = self.begin(total)
            while not run.finished and len(run.stages) <= self.stages:
                run.advance()
            self.runs[total] = run
        return self.runs[total]

    def look(self, total: int) -> tuple[float, float]:
        """Energy and error after the first stages, whatever the run has reached since."""
        run = self.run(total)
        stages = run.stages[: self.stages + 1]
        return stages[-1].energy, energy_error(stages, run.limits.floor)

    def search(self, first: int) -> int:
        """The total charge of lowest energy: downhill from `first`, then from any probe that lies lower.

        Probes are all charges where they are few, else the opposite one (an easy axis makes both signs of a moment
        minima), the ends and the charges half way to them, since energies need not be convex in the charge.
        """
        best = self._downhill(int(np.clip(first, self.lowest, self.highest)))
        if self.multiplets:
            probes = [self.lowest]
        elif self.highest - self.lowest <= FEW:
            probes = list(range(self.lowest, self.highest + 1))
        else:
            probes = [self.lowest + self.highest - best, self.lowest, self.highest]
            probes += [(self.lowest + best) // 2, (best + self.highest) // 2]
        for total in probes:
            if total != best and self._better(total, best):
                best = self._downhill(total)
        return best

    def _downhill(self, best: int, reach: int = 2) -> int:
        """Looks `reach` steps to either side."""
        while True:
            steps = (1, -1) if self.multiplets else (1, -1, *(s * k for k in range(2, reach + 1) for s in (1, -1)))
            around = [best + step for step in steps if self.lowest <= best + step <= self.highest]
            better = next((total for total in around if self._better(total, best)), None)
            if better is None:
                return best
            best = better

    def _better(self, total: int, best: int) -> bool:
        energy, error = self.look(total)
        least, least_error = self.look(best)
        rise = energy - least
        if not self.multiplets:
            return rise < -self.run(best).limits.floor
        noise = max(error, least_error)
        return rise <= noise if total > best else rise < -noise

    def undecided(self, best: int) -> list[int]:
        """Other charges whose true energy may still be the lowest; with multiplets only the next smaller one can
        tell."""
        looks = {total: self.look(total) for total in self.runs}
        rivals = [t for t, (energy, error) in looks.items() if t != best and energy - error <= looks[best][0]]
        return [t for t in rivals if t == best - 1] if self.multiplets else rivals
