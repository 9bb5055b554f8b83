"""From a start state to a converged one: sweeps in stages of falling truncation, until the error is small enough or a
limit is met."""

import itertools
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from manybody.quantum import memory, one_site, two_site, variance
from manybody.quantum.chain import Chain
from manybody.quantum.extrapolation import Stage, energy_error
from manybody.quantum.spectra import MISSED

FIRST_ALLOWED = 1e-6
LEAST_ALLOWED = 1e-15
SWEEPS, MOST_SWEEPS, MOST_STAGES = 8, 24, 40
CRAWL = 0.8
FRACTION = 0.3
GROWTH, FIRST_BOND = 2, 64
LIMITED = 1 + 5 * MISSED
"""A weight discarded, over the one allowed, that only a limit of the bond explains: what a cut tells is a little more
than it loses."""


@dataclass(frozen=True)
class Limits:
    """goal: wanted error of the energy, absolute. bond: largest bond dimension; memory_bond: the one that memory
    allows. floor: rounding error of an energy. vectors: Lanczos products per step. pairs: two-site steps instead of
    one-site steps with expansion."""

    goal: float
    bond: int
    memory_bond: int
    floor: float
    norm: float
    vectors: int = 3
    pairs: bool = True

    @property
    def largest(self) -> int:
        return max(1, min(self.bond, self.memory_bond))


@dataclass(eq=False)
class Run:
    """A chain on its way. stages: what was reached, the start state first; allowed: relative weight a bond may lose in
    the present stage; bounded, narrow: the last stage wanted more states than the limit, or than its own ceiling, which
    at most doubles (GROWTH) from stage to stage.

    under_way: a stage is begun but not done; energies: what its half sweeps gave so far; site, lost, cut, before: how
    far the present half sweep is, the weight it discarded, whether the ceiling was the cause, and the bond dimension it
    began with. With them a run can be broken off and taken up at any call of `pause`, made before every step and after
    every stage. seed: of the random vectors of expansions. unmixings: see sweeps.
    """

    chain: Chain
    limits: Limits
    seed: int
    report: Callable[[dict], None] | None = None
    stages: list[Stage] = field(default_factory=list)
    allowed: float = FIRST_ALLOWED
    sweeps: int = 0
    bounded: bool = False
    narrow: bool = False
    ceiling: int = 0
    vectors: int = 0
    under_way: bool = False
    energies: list[float] = field(default_factory=list)
    site: int = 0
    lost: float = 0.0
    cut: bool = False
    before: int = 0
    unmixings: int = 0
    pause: Callable[[], None] = lambda: None

    def __post_init__(self) -> None:
        self.ceiling = self.ceiling or min(max(FIRST_BOND, self.chain.bond_dimension), self.limits.largest)
        self.vectors = self.vectors or self.limits.vectors

    @property
    def energy(self) -> float:
        return self.stages[-1].energy

    @property
    def error(self) -> float:
        return energy_error(self.stages, self.limits.floor)

    @property
    def finished(self) -> bool:
        """Good enough, or nothing left to try."""
        if not self.stages or self.under_way:
            return False
        done = len(self.stages) > 2 and self.error <= max(self.limits.goal, 2 * self.limits.floor)
        last = self.stages[-1]
        eigenstate = last.variance <= self.limits.floor**2 and last.gain <= self.limits.floor
        # Slow sweeps of a few sites fall on when nothing is cut any more.
        falls = 2 <= len(self.stages) < MOST_STAGES and self.stages[-2].energy - last.energy > self.limits.goal
        exhausted = self.allowed <= LEAST_ALLOWED and not falls
        return done or self.bounded or exhausted or eigenstate

    def repeat(self) -> None:
        """A stage at the truncation of the last one, after the chain was changed from outside."""
        self._stage()

    def advance(self) -> None:
        """One more stage, or the rest of the one under way."""
        if self.under_way:
            pass
        elif not self.stages:
            energy, spread = variance.measure(self.chain)
            self.stages.append(Stage(self.chain.bond_dimension, energy, spread, 0.0, np.inf, 1.0))
        else:
            if not self.narrow:
                ratio = self.limits.goal / max(self.error, 1e-300)
                self.allowed = max(self.allowed * float(np.clip(ratio / 4, 0.03, 0.1)), LEAST_ALLOWED)
            self.ceiling = min(max(GROWTH * self.stages[-1].bond_dimension, FIRST_BOND), self.limits.largest)
        self._stage()

    def pursue(self, wanted: Callable[[], bool]) -> None:
        """Stages until finished, or no longer wanted, which is asked after every one of them."""
        while not self.finished and (self.under_way or len(self.stages) < 2 or wanted()):
            self.advance()

    def _stage(self) -> None:
        self.under_way = True
        energies = self.energies
        gains = [np.inf, *(before - after for before, after in itertools.pairwise(energies))]
        while len(energies) < MOST_SWEEPS:
            if self.site == 0:
                self.before = self.chain.bond_dimension
            energy, discarded, bounded = self._half_sweep()
            energies.append(energy)
            self._tell(energy, discarded)
            if len(energies) == 1:
                continue
            gains.append(energies[-2] - energies[-1])
            grows = self.chain.bond_dimension > 1.05 * self.before
            most = memory.most_vectors(self.chain.step_bytes(self.limits.pairs), self.limits.vectors)
            crawls = gains[-1] > CRAWL * gains[-2] and not grows
            if gains[-1] < max(0.1 * (energies[0] - energies[-1]), 0.05 * self.limits.goal):
                break
            if crawls:
                if len(energies) >= SWEEPS and self.vectors >= most:
                    break
                self.vectors = min(2 * self.vectors, most)
        energy, spread = variance.measure(self.chain)
        self.narrow = bounded and self.ceiling < self.limits.largest
        self.bounded = bounded and not self.narrow
        ratio = gains[-1] / gains[-2] if gains[-2] > 0 else 1.0
        self.stages.append(Stage(self.chain.bond_dimension, energy, spread, discarded, gains[-1], ratio))
        self.under_way, self.energies = False, []
        self._tell(energy, discarded, spread)
        self.pause()

    def _half_sweep(self) -> tuple[float, float, bool]:
        """Energy at the end, summed discarded weight, whether the bond limit cut more than the allowed weight."""
        chain, limits = self.chain, self.limits
        energy = 0.0
        tolerance = 1e-3 * np.sqrt(limits.goal * limits.norm / chain.length)
        while self.site < chain.length - 1:
            self.pause()
            site = self.site
            if limits.pairs:
                energy, lost = two_site.step(chain, site, self.ceiling, self.allowed, self.vectors, tolerance)
            else:
                most = self.ceiling + max(4, int(FRACTION * self.ceiling))
                # Not a stream of numbers: a run that is taken up again meets the same ones, though in another gauge.
                seed = (self.seed + self.sweeps) * chain.length + site
                energy, lost = one_site.step(
                    chain, site, FRACTION, most, seed, self.ceiling, self.allowed, self.vectors, tolerance
                )
            self.lost += lost
            self.cut |= bool(lost > LIMITED * self.allowed)
            self.site += 1
        chain.mirror()
        self.sweeps += 1
        lost, cut = self.lost, self.cut
        self.site, self.lost, self.cut = 0, 0.0, False
        return energy, lost, cut

    def _tell(self, energy: float, discarded: float, spread: float | None = None) -> None:
        if self.report:
            self.report(
                {
                    "sweep": self.sweeps,
                    "bond_dimension": self.chain.bond_dimension,
                    "energy": energy,
                    "variance": spread
                    if spread is not None
                    else (self.stages[-1].variance if self.stages else float("nan")),
                    "discarded_weight": discarded,
                }
            )
