"""Minima of an energy function on the product of spheres: many starts, descent, polishing, distinct minima.

Quadratic functions run through compiled alignment sweeps and Newton steps, one start after the other, with more than
LONG_WAVES sites preconditioned (patches.py); functions of higher degree through batched quasi-Newton and Newton steps.
Starts come in rounds, so that a proof of global minimality can end the search.
"""

import functools
import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from manybody.classical import polish, starts
from manybody.classical.distinct import Comparison, coupled_sites
from manybody.classical.site_form import SiteForm, site_form
from manybody.classical.sphere_product import normalized, random_points
from manybody.classical.translations import PlaneWaves, plane_waves
from manybody.model.energy import EnergyFunction

WAVES = 800  # sites from which plane waves are looked for: smaller coupling matrices are diagonalized in full
LARGE = 300_000  # sites from which a frustrated function gets one start, from the lowest eigenvectors
LONG_WAVES = 60_000  # sites from which Newton steps are preconditioned by rotations of patches
SLOW = 1e-6  # see MinimizeSettings.tolerance
PATCH_PRODUCTS = 2_500_000_000  # sites x Hessian products that such a descent may spend


@dataclass(frozen=True)
class MinimizeSettings:
    """starts: how many starting configurations; seed: of the random ones, equal seeds give equal results.

    tolerance: wanted largest tangential gradient at a site, relative to the strongest sum of couplings at a site. With
    more than LONG_WAVES sites a descent may also end at SLOW, once the energy no longer falls beyond rounding:
    some modes at the corners of open lattices are so soft that the rest would take longer than all before.
    max_site_starts: at most this many sites x starts are spent (but at least two starts, one beyond LARGE): on 10^6
    sites fewer starts than asked for are made, and `starts_used` says how many. sweeps: alignment sweeps of a start
    (quasi-Newton steps: five times as many), newton_steps: polishing steps, at most.
    """

    starts: int = 64
    seed: int = 1
    tolerance: float = 1e-10
    max_site_starts: int = 2_000_000
    sweeps: int = 400
    newton_steps: int = 200

    def __post_init__(self):
        if int(self.starts) != self.starts or self.starts < 1:
            raise ValueError(f"starts must be a positive integer, got {self.starts!r}")
        if not 0 < self.tolerance < 1:
            raise ValueError(f"tolerance must lie between 0 and 1, got {self.tolerance!r}")


@dataclass(frozen=True)
class Minimum:
    """A local minimum, and how many starts ended in it (up to the rotations that leave f unchanged)."""

    energy: float
    configuration: np.ndarray  # (N, 3)
    count: int


@dataclass(frozen=True)
class ClassicalResult:
    """energy, configuration (N, 3): the lowest minimum found. minima: all distinct ones, lowest first.

    gradient_norm: largest tangential gradient at a site over the strongest sum of couplings at a site, at
    `configuration`. converged: the descent ended as MinimizeSettings.tolerance says. proven: a proof of global
    minimality ended the search.
    """

    energy: float
    configuration: np.ndarray
    minima: tuple[Minimum, ...]
    gradient_norm: float
    converged: bool
    starts_used: int
    proven: bool


def minimize(
    f: EnergyFunction,
    settings: MinimizeSettings | None = None,
    extra_starts: np.ndarray | None = None,
    proof: Callable[[np.ndarray], bool | np.ndarray] | None = None,
    report: Callable[[dict], None] | None = None,
) -> ClassicalResult:
    """Search the global minimum of f.

    extra_starts: (r, N, 3) configurations tried first, beside settings.starts. proof: called with the lowest
    configuration (N, 3) after every round of starts; True ends the search, an array (r, N, 3) holds starts to try next
    (not counted in settings.starts either), anything else lets the search go on. report: called with
    {"starts": used so far, "energy": lowest so far} after every round. f that is constant returns at once.
    Couplings of any size are scaled internally; the results are in the units of f.
    """
    settings = settings or MinimizeSettings()
    scaled, exponent = f.rescaled()
    if not coupled_sites(scaled).any():  # couplings 1e-320 of a constant vanish with the scaling, too
        up = np.tile([0.0, 0.0, 1.0], (f.sites, 1))
        energy = float(f.value(up))
        return ClassicalResult(energy, up, (Minimum(energy, up, 1),), 0.0, True, 0, True)
    problem = problem_of(scaled, settings)
    pool = _Pool(scaled, problem.strength)
    used, proven = 0, False
    rounds = _rounds(problem, settings, extra_starts)
    for batch in rounds:
        pool.add(*problem.descend(batch))
        used += len(batch)
        if report is not None:
            report({"starts": used, "energy": math.ldexp(pool.energy, exponent) + f.constant})
        answer = problem.is_lowest(pool.energy) or (proof is not None and proof(pool.configuration))
        if not isinstance(answer, bool) and len(answer):
            pool.add(*problem.descend(np.asarray(answer)))
            used += len(answer)
            answer = proof(pool.configuration)
        if answer is True:
            proven = True
            break
    minima = tuple(
        Minimum(math.ldexp(energy, exponent) + f.constant, configuration, count)
        for energy, configuration, count in pool.sorted()
    )
    residual = pool.gradient / problem.strength
    return ClassicalResult(
        energy=minima[0].energy,
        configuration=minima[0].configuration,
        minima=minima,
        gradient_norm=residual,
        converged=residual <= problem.tolerance,
        starts_used=used,
        proven=proven,
    )


class QuadraticProblem:
    """Descent for a function of degree two."""

    def __init__(self, form: SiteForm, settings: MinimizeSettings):
        self.form = form
        self.settings = settings
        self.strength = self.form.strength()
        self.tolerance = max(settings.tolerance, SLOW if form.sites > LONG_WAVES else 0.0)
        self.floor = starts.unfrustrated_bound(self.form)
        self.field = form.field if len(form.field) else np.zeros((form.sites, 3))
        shifted = form.diagonal if len(form.diagonal) else np.zeros((0 if form.isotropic else form.sites, 3, 3))
        if len(form.diagonal):
            shifted = shifted - np.linalg.eigvalsh(shifted)[:, -1, None, None] * np.eye(3)
        self.shifted = shifted

    @functools.cached_property
    def waves(self) -> PlaneWaves | None:
        """The plane waves of a large form that translations map onto itself, perhaps but for open boundaries."""
        return plane_waves(self.form) if self.form.sites > WAVES else None

    @functools.cached_property
    def wave_floor(self) -> float:
        """A lower bound of f - constant from the lowest plane wave."""
        return -math.inf if self.waves is None else self.waves.unshifted_bound()

    def is_lowest(self, energy: float) -> bool:
        """Whether the energy (constant of the form included) reaches the bound of an unfrustrated function or that of
        the lowest plane wave.
        """
        energy -= self.form.constant
        return energy <= self.floor + 1e-13 * abs(self.floor) or energy <= self.wave_floor + 1e-12 * abs(self.floor)

    def value(self, x: np.ndarray) -> float:
        """The function at one configuration (N, 3), summed pairwise: rounding of a plain sum shows at 10^5 sites."""
        from manybody.classical.vector_sweeps import product

        out = np.empty_like(x)
        product(x, *self.form.arrays[:5], out)
        return self.form.constant + float(np.einsum("ia,ia->i", x, 0.5 * out - self.field).sum())

    def descend(self, configurations: np.ndarray) -> polish.Polished:
        from manybody.classical import vector_sweeps as compiled

        form, settings, strength = self.form, self.settings, self.strength
        x = np.array(configurations, dtype=float)
        energies, gradients = np.empty(len(x)), np.empty(len(x))
        inner = int(np.clip(4 * np.sqrt(form.sites), 500, 3000))
        budget = max(2000, min(10 * inner, 1_500_000_000 // form.sites))
        arrays = (form.indptr, form.neighbours, form.weights, form.blocks)
        for k in range(len(x)):
            # plain alignment first: it leaves high random states and saddle points fastest; over-relaxation for the
            # long waves
            compiled.descend(x[k], *arrays, self.shifted, self.field, 1.0, min(10, settings.sweeps), 1e-2 * strength)
            compiled.descend(x[k], *arrays, self.shifted, self.field, 1.7, settings.sweeps, 5e-3 * strength)
            goal = settings.tolerance * strength
            if form.sites > LONG_WAVES:
                from manybody.classical import patches

                _, gradients[k], _ = patches.newton(
                    x[k], (*arrays, form.diagonal), self.shifted, self.field, goal, SLOW * strength, strength,
                    settings.newton_steps, PATCH_PRODUCTS // form.sites,
                )  # fmt: skip
                energies[k] = self.value(x[k])
            else:
                energy, gradients[k], _ = compiled.newton(
                    x[k], *arrays, form.diagonal, self.field, goal, strength, settings.newton_steps, inner, budget
                )
                energies[k] = energy + form.constant
        return polish.Polished(x, energies, gradients)


def problem_of(f: EnergyFunction, settings: MinimizeSettings) -> "QuadraticProblem | GeneralProblem":
    """The descent that suits f, whose couplings should be of order one (`rescaled`)."""
    if f.is_quadratic:
        return QuadraticProblem(site_form(*f.quadratic_form(), tolerance=1e-15), settings)
    return GeneralProblem(f, settings)


class GeneralProblem:
    """Descent for a function of any degree."""

    BATCH = 2_000_000  # sites x starts held at once

    def __init__(self, f: EnergyFunction, settings: MinimizeSettings):
        self.f = f
        self.settings = settings
        # |d C_kq / d n| <= k for the semi-normalized harmonics
        strength = np.zeros(f.sites)
        for group in f.groups:
            norm = np.sqrt(np.sum(group.coefficients.reshape(group.terms, -1) ** 2, axis=1))
            for slot, rank in enumerate(group.ranks):
                strength += np.bincount(group.sites[:, slot], rank * norm, f.sites)
        self.strength = float(strength.max())
        self.tolerance, self.waves = settings.tolerance, None
        quadratic = EnergyFunction(f.sites, 0.0, [g for g in f.groups if any(g.ranks) and sum(g.ranks) <= 2])
        self.form = site_form(*quadratic.quadratic_form(), tolerance=1e-15)

    def is_lowest(self, energy: float) -> bool:
        return False

    def value(self, x: np.ndarray) -> float:
        return float(self.f.value(x))

    def descend(self, configurations: np.ndarray) -> polish.Polished:
        at_once = max(1, self.BATCH // self.f.sites)
        parts = [self._descend(configurations[k : k + at_once]) for k in range(0, len(configurations), at_once)]
        return polish.Polished(*(np.concatenate(arrays) for arrays in zip(*parts, strict=True)))

    def _descend(self, configurations: np.ndarray) -> polish.Polished:
        f, settings, strength = self.f, self.settings, self.strength
        steps = 5 * settings.sweeps
        rough = polish.quasi_newton(f.value_and_gradient, configurations, 1e-5 * strength, steps, strength)
        return polish.truncated_newton(
            f.value_and_gradient, f.hessian_product, rough.configurations, settings.tolerance * strength, strength,
            settings.newton_steps,
        )  # fmt: skip


def _rounds(problem, settings: MinimizeSettings, extra: np.ndarray | None) -> Iterator[np.ndarray]:
    """Batches of starts: those handed in, one placed along the bonds or made of the lowest plane waves, then growing
    mixtures of eigenvector and random starts.
    """
    form = problem.form
    generator = np.random.default_rng(settings.seed)
    left = min(settings.starts, max(2, settings.max_site_starts // form.sites))
    if extra is not None and len(extra):
        extra = np.asarray(extra, dtype=float)
        if extra.ndim != 3 or extra.shape[1:] != (form.sites, 3):
            raise ValueError(f"extra_starts must have shape (r, {form.sites}, 3), got {extra.shape}")
        yield normalized(extra)
    placed = starts.placed_start(form, generator)
    exact = problem.is_lowest(problem.value(placed))
    lowest = starts.LowestModes(form, None if exact else problem.waves)
    if not exact and form.sites > LARGE:
        left = 1  # frustrated: the placed state only is a poor start, and one good start takes minutes
    if exact or form.sites <= LARGE or problem.waves is not None:
        yield placed[None] if exact or problem.waves is None else lowest.starts(generator, 1)
        left -= 1
    # half eigenvector starts while they are few, then mostly random ones: these reach minima that the matrix alone does
    # not know
    size, of_modes = 6, 3
    while left > 0:
        size = min(size, left)
        modes = min(of_modes, size)
        parts = [lowest.starts(generator, modes)] if modes else []
        if size > modes:
            parts.append(random_points(generator, form.sites, (size - modes,)))
        yield np.concatenate(parts)
        left -= size
        size, of_modes = 2 * size, max(of_modes - 1, 1)


class _Pool:
    """The distinct minima met so far."""

    def __init__(self, f: EnergyFunction, strength: float):
        self.comparison = Comparison(f)
        self.loose = np.flatnonzero(~coupled_sites(f))
        self.strength = strength
        self.energies: list[float] = []
        self.configurations: list[np.ndarray] = []
        self.counts: list[int] = []
        self.gradients: list[float] = []

    def add(self, configurations: np.ndarray, energies: np.ndarray, gradients: np.ndarray) -> None:
        for n, energy, gradient in zip(configurations, energies, gradients, strict=True):
            n = n.copy()
            n[self.loose] = [0.0, 0.0, 1.0]
            tied = [k for k, e in enumerate(self.energies) if abs(e - energy) <= 1e-8 * (self.strength + abs(e))]
            if tied:
                distance = self.comparison.distance(n, np.array([self.configurations[k] for k in tied]))
                nearest = int(np.argmin(distance))
                if distance[nearest] < 1e-2:
                    k = tied[nearest]
                    self.counts[k] += 1
                    if (gradient, energy) < (self.gradients[k], self.energies[k]):
                        self.energies[k], self.configurations[k], self.gradients[k] = float(energy), n, float(gradient)
                    continue
            self.energies.append(float(energy))
            self.configurations.append(n)
            self.counts.append(1)
            self.gradients.append(float(gradient))

    @property
    def best(self) -> int:
        """The lowest; among those equal to rounding the one with the smallest gradient."""
        lowest = min(self.energies)
        tied = [k for k, e in enumerate(self.energies) if e <= lowest + 1e-12 * (self.strength + abs(lowest))]
        return min(tied, key=lambda k: self.gradients[k])

    @property
    def energy(self) -> float:
        return self.energies[self.best]

    @property
    def configuration(self) -> np.ndarray:
        return self.configurations[self.best]

    @property
    def gradient(self) -> float:
        return self.gradients[self.best]

    def sorted(self) -> list[tuple[float, np.ndarray, int]]:
        best = self.best
        order = sorted(range(len(self.energies)), key=lambda k: (k != best, self.energies[k]))
        return [(self.energies[k], self.configurations[k], self.counts[k]) for k in order]
