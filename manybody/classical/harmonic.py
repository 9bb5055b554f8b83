"""The first quantum correction e_1, minimized over everything that ties classically: selection by quantum fluctuations.

Where minima form a manifold, or several inequivalent minima tie, the quantum ground energy to order 1/S is f_min plus
the LOWEST e_1 / S (Villain et al. 1980, J. Phys. France 41, 1263; Henley 1989, Phys. Rev. Lett. 62, 2056). Manifolds
are explored along the null vectors of the Hessian: step, fall back onto the manifold by Newton steps, compare.
Configurations made as collinear, or as non-collinear, as the manifold allows are tried beside the given ones, since e_1
often is lowest at a kink there that no small step hits exactly.
"""

from dataclasses import dataclass

import numpy as np

from manybody.classical.distinct import Comparison
from manybody.classical.frequencies import Fluctuations, HarmonicTrouble, UnstablePoint, fluctuations
from manybody.classical.minimize import (
    ClassicalResult,
    MinimizeSettings,
    minimize,
    problem_of,
)
from manybody.classical.sphere_product import normalized, project, retract
from manybody.model.couplings import biquadratic
from manybody.model.energy import EnergyFunction

__all__ = ["HarmonicCorrection", "HarmonicTrouble", "SelectionSettings", "UnstablePoint", "harmonic_correction"]


@dataclass(frozen=True)
class SelectionSettings:
    """evaluations: how many configurations may be compared, reduced for large systems: evaluations x sites^3 <= work.

    ties: starts of a search for further minima that tie (0: none; none is made beyond 400 sites). tie: energies within
    this distance, relative to |f - f_mean|, tie. seed: of the random steps along the manifold. step: the smallest one.
    """

    evaluations: int = 300
    work: float = 2e9
    tie: float = 1e-9
    ties: int = 12
    seed: int = 1
    step: float = 1e-7


@dataclass(frozen=True)
class HarmonicCorrection:
    """e1 of the selected configuration (N, 3): E = f_min + e1 / S + O(1/S^2).

    frequencies (N,) ascending and trace = tr A at it; zero_modes of the frequencies. spread: largest minus smallest e1
    met among the configurations that tie (0 where there is one). evaluations: how many were compared. exhausted: the
    search ended because all candidates were compared and e1 no longer fell along the manifold, not because the allowed
    evaluations were spent.
    """

    e1: float
    frequencies: np.ndarray
    zero_modes: int
    trace: float
    spread: float
    configuration: np.ndarray
    evaluations: int
    exhausted: bool


def harmonic_correction(
    f: EnergyFunction,
    n: np.ndarray | ClassicalResult,
    rule: str,
    settings: SelectionSettings | None = None,
) -> HarmonicCorrection:
    """First quantum correction of f under a rule, minimized over the configurations that tie.

    n: a minimum (N, 3), several (M, N, 3) with the lowest first, or the result of `minimize`; all that tie with the
    lowest are compared. Raises HarmonicTrouble (UnstablePoint, TooLarge) as `fluctuations` does at the lowest.
    """
    settings = settings or SelectionSettings()
    if isinstance(n, ClassicalResult):
        candidates = np.array([m.configuration for m in n.minima])
    else:
        candidates = np.asarray(n, dtype=float)
        candidates = candidates[None] if candidates.ndim == 2 else candidates
    configuration = candidates[0]
    search = _Search(f, configuration, rule, settings)
    search.visit(configuration, must=True)
    if search.spent < search.allowed:
        for candidate in [*candidates[1:], *search.others()]:
            search.visit_new(candidate)
        if len(search.flexible(search.best)):
            for candidate in search.shaped():
                search.visit(candidate)
            search.follow()
            search.flatten()
    elif len(candidates) > 1 or len(search.flexible(search.best)):
        search.exhausted = False
    best = search.best
    return HarmonicCorrection(
        e1=best.e1,
        frequencies=best.fluctuations.frequencies,
        zero_modes=best.fluctuations.zero_modes,
        trace=best.fluctuations.trace,
        spread=search.highest - best.e1,
        configuration=best.configuration,
        evaluations=search.spent,
        exhausted=search.exhausted,
    )


@dataclass(frozen=True)
class _Point:
    configuration: np.ndarray
    fluctuations: Fluctuations
    e1: float


class _Search:
    def __init__(self, f: EnergyFunction, configuration: np.ndarray, rule: str, settings: SelectionSettings):
        self.f, self.rule, self.settings = f, rule, settings
        self.lowest = float(f.value(configuration))
        self.tie = settings.tie * abs(self.lowest - f.mean)
        self.generator = np.random.default_rng(settings.seed)
        largest = max(len(cluster) for cluster in f.components())
        self.allowed = int(np.clip(settings.work / largest**3, 1, settings.evaluations))
        self.spent, self.exhausted = 0, True
        self.axes = f.symmetry_axes()
        scaled, _ = f.rescaled()
        newton = MinimizeSettings(starts=1, sweeps=0)
        self.problem = problem_of(scaled, newton)
        self.comparison = Comparison(f)
        self.known: list[np.ndarray] = []
        self.best: _Point | None = None
        self.highest = -np.inf

    def visit(self, configuration: np.ndarray, must: bool = False) -> _Point | None:
        """Evaluate e1 where the configuration ties and is a minimum; None elsewhere. `must`: raise instead."""
        if self.spent >= self.allowed + 5 and not must:
            self.exhausted = False
            return None
        if not must and abs(float(self.f.value(configuration)) - self.lowest) > self.tie:
            return None
        self.spent += 1
        try:
            found = fluctuations(self.f, configuration)
        except UnstablePoint:
            if must:
                raise
            return None
        point = _Point(configuration, found, found.e1(self.f, configuration, self.rule))
        self.known.append(configuration)
        self.highest = max(self.highest, point.e1)
        if self.best is None or self._better(point):
            self.best = point
        return point

    def visit_new(self, configuration: np.ndarray) -> None:
        """`visit`, unless the configuration is a known one turned as a whole."""
        if self.known and self.comparison.distance(configuration, np.array(self.known)).min() < 1e-4:
            return
        self.visit(configuration)

    def others(self) -> list[np.ndarray]:
        """Minima of a few more starts: a search that a proof cut short may not have met all that tie."""
        if not self.settings.ties or self.f.sites > 400:
            return []
        settings = MinimizeSettings(starts=self.settings.ties, seed=self.settings.seed + 1)
        return [m.configuration for m in minimize(self.f, settings).minima]

    def _better(self, point: _Point) -> bool:
        """Lower e1; at a difference that rounding can make beside a kink, where e1 is good to half the digits, more
        zero modes.
        """
        best = self.best
        if abs(point.e1 - best.e1) <= self._noise() and point.fluctuations.zero_modes != best.fluctuations.zero_modes:
            return point.fluctuations.zero_modes > best.fluctuations.zero_modes
        return point.e1 < best.e1

    def _noise(self) -> float:
        return 1e-8 * max(float(np.sum(self.best.fluctuations.frequencies)), abs(self.best.e1))

    def flexible(self, point: _Point) -> np.ndarray:
        """Orthonormal null vectors (k, N, 3) of the Hessian that are not common rotations f allows."""
        flat = point.fluctuations.flat
        rotations = np.cross(self.axes[:, None, :], point.configuration[None])
        if not len(flat):
            return flat
        basis = flat.reshape(len(flat), -1)
        if len(rotations):
            turned = rotations.reshape(len(rotations), -1)
            _, weight, right = np.linalg.svd(turned, full_matrices=False)
            span = right[weight > 1e-8 * max(weight[0], 1e-300)]
            basis = basis - (basis @ span.T) @ span
        _, weight, right = np.linalg.svd(basis, full_matrices=False)
        return right[weight > 1e-5].reshape(-1, self.f.sites, 3)

    def shaped(self) -> list[np.ndarray]:
        """Minima of f with a small preference for collinear, or for orthogonal, neighbours: e1 is
        often extremal there.
        """
        pairs = {tuple(sites) for g in self.f.groups for sites in g.sites.tolist() if len(sites) == 2}
        if not pairs or self.f.sites > 400:
            return []
        scaled, _ = self.f.rescaled()
        extra = biquadratic(self.f.sites, np.array(sorted(pairs)), 1.0)
        found = []
        for sign in (-1.0, 1.0):
            starts = [self.best.configuration]
            turned = [retract(n, 0.2 * self.generator.standard_normal(n.shape)) for n in starts for _ in range(2)]
            settings = MinimizeSettings(starts=4, seed=self.settings.seed, tolerance=1e-9)
            result = minimize(scaled + sign * 0.02 * extra, settings, extra_starts=np.array(starts + turned))
            found += [self.settled(m.configuration) for m in result.minima[:3]]
        return found

    def flatten(self) -> None:
        """Put the best configuration exactly into its plane or onto its line, if it is close to one."""
        n = self.best.configuration
        _, _, axes = np.linalg.svd(n, full_matrices=False)
        for kept in (1, 2):
            flat = n @ axes[:kept].T @ axes[:kept]
            if np.linalg.norm(flat - n, axis=1).max() < 0.05:
                point = self.visit(self.settled(normalized(flat)))
                if point is not None and abs(point.e1 - self.best.e1) <= self._noise():
                    self.best = point
                return

    def settled(self, configuration: np.ndarray) -> np.ndarray:
        """The minimum of f next to the configuration: Newton steps alone, which change the flat directions least."""
        return self.problem.descend(configuration[None]).configurations[0]

    def follow(self) -> None:
        """Random steps along the null vectors, longer after success and shorter after failures."""
        step, failures, flat_rounds = 0.5, 0, 0
        start = self.best.e1
        directions = self.flexible(self.best)
        scale = max(abs(start), float(self.best.fluctuations.frequencies.sum()), 1e-300)
        seen = 0.0
        while step > self.settings.step and len(directions):
            if self.spent >= self.allowed:
                self.exhausted = False
                return
            mixed = np.tensordot(self.generator.standard_normal(len(directions)), directions, axes=1)
            mixed *= step * np.sqrt(self.f.sites) / np.linalg.norm(mixed)
            before = self.best
            for sign in (1.0, -1.0):
                moved = project(before.configuration, sign * mixed)
                point = self.visit(self.settled(retract(before.configuration, moved)))
                if point is not None:
                    seen = max(seen, abs(point.e1 - before.e1))
                if self.best is not before:
                    break
            if self.best.e1 < before.e1 - 1e-13 * scale:
                directions = self.flexible(self.best)
                step, failures = min(1.5 * step, 1.0), 0
            else:
                failures += 1
                if failures > min(2 * len(directions), 6):
                    flat_rounds += 1
                    if seen <= 1e-9 * scale and flat_rounds == 2:
                        return  # e1 is the same everywhere on the manifold
                    step, failures = 0.3 * step, 0
