"""Proof that a configuration is a global minimum, or the best lower bound that could be had.

METHODS lists what a certificate can rest on. Every bound but the last kind is rigorous, floating-point rounding
included.
"""

import functools
import math
from dataclasses import dataclass

import numpy as np

from manybody.classical.clusters import cluster_sum
from manybody.classical.distinct import coupled_sites
from manybody.classical.minimize import MinimizeSettings, problem_of
from manybody.classical.multipliers import DualForm, dual_bound, dual_form, multipliers_at
from manybody.classical.relaxation import relax, rounded
from manybody.model.energy import EnergyFunction

METHODS = {
    "constant": "the function does not depend on the vectors",
    "unfrustrated": "every term at its own minimum",
    "multipliers": "one multiplier per site taken from the configuration",
    "relaxation": "one multiplier per site, optimized through the semidefinite relaxation",
    "clusters": "sum of the exact minima of small clusters",
    "clusters_searched": "sum of the lowest minima found of small clusters: not a rigorous bound",
}


FEW_CLUSTERS = 12  # inequivalent clusters that are worth minimizing for a quadratic function, beside its relaxation


@dataclass(frozen=True)
class CertificateSettings:
    """tolerance: largest distance of energy and bound that counts as proof, relative to |f - f_mean| at the
    configuration.

    relaxation: whether the semidefinite relaxation may be solved where plain multipliers fail; relaxed_sites: only up
    to this number of sites. roundings: configurations made from its solution. seed: of its random start.
    """

    tolerance: float = 1e-8
    relaxation: bool = True
    relaxed_sites: int = 20_000
    roundings: int = 16
    seed: int = 1


@dataclass(frozen=True)
class Certificate:
    """bound <= min f if `rigorous`. certified: the configuration is a global minimum within the tolerance (only from
    rigorous bounds).

    method: a key of METHODS. gap: f(configuration) - bound. starts (r, N, 3): configurations made from the relaxation,
    for `minimize`; r may be 0. rank: columns of the solution of the relaxation (0 without one); it is tight if at most
    3.
    """

    bound: float
    certified: bool
    rigorous: bool
    method: str
    gap: float
    starts: np.ndarray
    rank: int = 0


def certify(f: EnergyFunction, configuration: np.ndarray, settings: CertificateSettings | None = None) -> Certificate:
    """Certificate for a configuration (N, 3) of unit vectors, best a polished minimum of f."""
    prover = Prover(f, settings or CertificateSettings())
    prover.improve(configuration, relaxation=True)
    return prover.certificate(configuration)


class Prover:
    """The best lower bound of f known so far; as a callable it is the `proof` of `minimize`."""

    def __init__(self, f: EnergyFunction, settings: CertificateSettings):
        self.f, self.settings = f, settings
        self.none = np.zeros((0, f.sites, 3))
        self.starts, self.rank, self.rigorous, self.calls = self.none, 0, True, 0
        self.relaxed = self.clustered = False
        self.scaled, self.exponent = f.rescaled()
        if not coupled_sites(self.scaled).any():
            self.bound, self.method = self.scaled.mean, "constant"
        elif self.scaled.is_quadratic:
            problem = problem_of(self.scaled, MinimizeSettings())
            self.problem, self.site_form = problem, problem.form
            self.bound, self.method = problem.form.constant + problem.floor * (1 + 1e-14), "unfrustrated"
        else:
            self.bound, self.method = -math.inf, "clusters"

    @functools.cached_property
    def form(self) -> DualForm:
        """Built when it is needed: unfrustrated functions of millions of sites never do."""
        return dual_form(self.site_form)

    def __call__(self, configuration: np.ndarray) -> bool | np.ndarray:
        self.calls += 1
        relaxed = self.relaxed
        self.improve(configuration, relaxation=self.calls > 1)
        if self._reached(configuration):
            return True
        return self.starts if self.relaxed and not relaxed else self.none

    def certificate(self, configuration: np.ndarray) -> Certificate:
        gap = self._energy(configuration) - self.bound
        return Certificate(
            bound=math.ldexp(self.bound, self.exponent) + self.f.constant,
            certified=self._reached(configuration),
            rigorous=self.rigorous,
            method=self.method,
            gap=math.ldexp(gap, self.exponent),
            starts=self.starts,
            rank=self.rank,
        )

    def improve(self, configuration: np.ndarray, relaxation: bool) -> None:
        """Look for a better bound, led by a configuration; the cheap ways first, and only while it is not proven."""
        configuration = np.asarray(configuration, dtype=float)
        if configuration.shape != (self.f.sites, 3):
            raise ValueError(f"the configuration must have shape ({self.f.sites}, 3), got {configuration.shape}")
        if self._reached(configuration):
            return
        if not self.scaled.is_quadratic:
            self._by_clusters()
            return
        if self.problem.waves is not None and self.problem.waves.exact:
            self._offer(self.problem.waves.dual_bound(configuration), "multipliers")
        else:
            self._offer(dual_bound(self.form, multipliers_at(self.form, configuration)), "multipliers")
        if self._reached(configuration) or not relaxation:
            return
        if not self.relaxed and self.f.sites <= self.settings.relaxed_sites:
            self.relaxed = True
            generator = np.random.default_rng(self.settings.seed)
            solution = relax(self.form, generator, configuration)
            self._offer(dual_bound(self.form, solution.multipliers), "relaxation")
            self.rank = solution.rank
            self.starts = rounded(self.form, solution, generator, self.settings.roundings)
        if not self._reached(configuration) and self.f.sites <= self.settings.relaxed_sites:
            self._by_clusters(FEW_CLUSTERS)

    def _by_clusters(self, most: int | None = None) -> None:
        if not self.clustered:
            self.clustered = True
            clusters = cluster_sum(self.scaled, self.settings.seed, most)
            if clusters is None:
                return
            if self.bound == -math.inf:
                self.rigorous = clusters.rigorous
            if clusters.rigorous or not self.rigorous:
                self._offer(clusters.bound, "clusters" if clusters.rigorous else "clusters_searched")

    def _offer(self, bound: float | None, method: str) -> None:
        if bound is not None and bound > self.bound:
            self.bound, self.method = bound, method

    def _energy(self, configuration: np.ndarray) -> float:
        return float(self.scaled.value(configuration))

    def _reached(self, configuration: np.ndarray) -> bool:
        energy = self._energy(configuration)
        # f - f_mean vanishes only for functions that are their mean: those are constant
        return self.rigorous and energy - self.bound <= self.settings.tolerance * abs(energy - self.scaled.mean)
