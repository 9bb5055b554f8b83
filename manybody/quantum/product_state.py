"""The best product state over all of (C^{2S+1})^N: full mean-field theory by a self-consistent field.

The energy of a product state is linear in every site's expectation values <W_kq>. With all others fixed, the best
state of one site is the lowest eigenvector of its mean-field operator; sites that share no term are updated together.
Every update lowers the energy, so it falls monotonically for every start.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize

from manybody.model.quantization import SpinOperator
from manybody.model.spin_matrices import coherent_states, harmonic_operators

_SWEEPS = 40  # sweeps from every start
_CULLS = (10, 20, 30)  # after these the better half of the starts goes on
_KEPT = 4  # starts followed further
_FIRST_LOOK = 100  # quasi-Newton steps after which a start that is not the best must have become it


@dataclass(frozen=True)
class ProductState:
    """Best product state found.

    energy: its energy, an upper bound on the ground energy. amplitudes: one vector (2 S_i + 1,) per site, normalized.
    converged: no site can gain more than the tolerance on its own. residual: what the last update of all sites gained.
    starts: how many were tried; finished: how many of them, the best ones, were followed beyond the first sweeps; hits:
    how many of those came to this energy.
    """

    energy: float
    amplitudes: tuple[np.ndarray, ...]
    converged: bool
    residual: float
    starts: int
    finished: int
    hits: int


def product_energy(
    op: SpinOperator,
    starts: np.ndarray | None = None,
    seed: int = 1,
    random_starts: int = 16,
    tolerance: float = 1e-12,
    max_iterations: int = 2000,
) -> ProductState:
    """Lowest energy of a product state, by a self-consistent field from many starts at once.

    starts (R, N, 3) or (N, 3): unit vectors of coherent product states to start from; random_starts are added to
    them, half of them coherent, half of them any vectors of C^{2S+1}, and, where a site has terms of rank 2 or more,
    two starts without any moment (each site in the state of lowest one-site energy). tolerance: relative to the norm
    of the couplings. The best of the starts is a minimum over single-site changes, not proved to be the global one.
    Raises ValueError for starts of the wrong shape.
    """
    symbol, exponent = op.symbol.rescaled()
    constant, op = op.symbol.constant, SpinOperator(op.spins, symbol)
    field = _MeanField(op)
    amplitudes = _starts(op, field, starts, seed, random_starts)
    count = len(amplitudes[0])
    threshold = tolerance * (field.norm or 1.0)
    values = field.expectations(amplitudes)
    gains = np.full(count, np.inf)
    for sweep in range(1, _SWEEPS + 1):
        gains = field.sweep(amplitudes, values)
        if gains.max() <= threshold:
            break
        if sweep in _CULLS and len(gains) > _KEPT:
            keep = np.argsort(field.energy(values), kind="stable")[: max(_KEPT, len(gains) // 2)]
            amplitudes, values = [a[keep] for a in amplitudes], [v[keep] for v in values]
    # Soft modes make the sweeps slow: the few best are finished by a quasi-Newton method, and one more sweep is the
    # test.
    order = np.argsort(field.energy(values), kind="stable")[:_KEPT]
    finished: list[tuple] = []
    for k in order:
        single = [a[k : k + 1].copy() for a in amplitudes]
        if finished:
            # Not worth the full effort unless a first part of it leads below the best.
            energy, single, gain = _polished(field, single, threshold, _FIRST_LOOK, rounds=1)
            if energy > min(energy for energy, *_ in finished) - threshold:
                finished.append((energy, single, gain))
                continue
        finished.append(_polished(field, single, threshold, max_iterations))
    best = int(np.argmin([energy for energy, *_ in finished]))
    energy, vectors, gain = finished[best]
    return ProductState(
        energy=math.ldexp(energy, exponent) + constant,
        amplitudes=field.by_site(vectors),
        converged=bool(gain <= 10 * threshold),
        residual=math.ldexp(gain, exponent),
        starts=count,
        hits=sum(other <= energy + 1e3 * threshold for other, *_ in finished),
        finished=len(finished),
    )


def _polished(field: "_MeanField", amplitudes: list[np.ndarray], threshold: float, iterations: int, rounds: int = 5):
    """(energy, amplitudes, gain of the last sweep) after quasi-Newton steps and sweeps in turn, each lowering the
    energy.
    """
    values = field.expectations(amplitudes)
    gain = float(field.sweep(amplitudes, values)[0])
    for _ in range(rounds):
        if gain <= threshold:
            break
        x = minimize(
            field.value_and_gradient,
            np.concatenate([a.reshape(-1) for a in amplitudes]).view(float),
            jac=True,
            method="L-BFGS-B",
            options={"maxiter": iterations, "maxfun": 2 * iterations, "ftol": 0.0, "gtol": 0.0, "maxcor": 20},
        ).x
        candidate = field.unpacked(x)
        expected = field.expectations(candidate)
        if field.energy(expected)[0] < field.energy(values)[0]:
            amplitudes, values = candidate, expected
        for _ in range(3):
            gain = float(field.sweep(amplitudes, values)[0])
    return float(field.energy(values)[0]), amplitudes, gain


@dataclass(frozen=True)
class _Slot:
    """One factor of one group, for the sites of one colour: which terms, and where their fields go."""

    group: int
    slot: int
    terms: np.ndarray
    rows: np.ndarray  # place of the site among those of the class


class _MeanField:
    """Energies, effective fields and updates of product states, batched over R starts.

    Amplitudes: one array (R, sites of that spin, d) per distinct spin. Expectations: one array (R, N, 2k+1) per rank.
    """

    def __init__(self, op: SpinOperator):
        self.spins, self.constant = np.asarray(op.spins), op.symbol.constant
        self.groups = []
        for group in op.symbol.groups:
            kept = [slot for slot, rank in enumerate(group.ranks) if rank > 0]
            ranks = tuple(group.ranks[slot] for slot in kept)
            tensor = group.coefficients.reshape(group.terms, *[2 * rank + 1 for rank in ranks])
            if ranks:
                self.groups.append((ranks, group.sites[:, kept], tensor))
            else:
                self.constant += float(tensor.sum())
        self.ranks = sorted({rank for ranks, _, _ in self.groups for rank in ranks})
        self.place = {rank: k for k, rank in enumerate(self.ranks)}
        self.norm = float(sum(np.abs(tensor).sum() for _, _, tensor in self.groups))
        self.highest = np.zeros(op.sites, dtype=int)
        for ranks, sites, _ in self.groups:
            for slot, rank in enumerate(ranks):
                np.maximum.at(self.highest, sites[:, slot], rank)
        self.kinds = [(float(spin), np.flatnonzero(self.spins == spin)) for spin in np.unique(self.spins)]
        self.classes = self._classes(self._colours(op.sites))
        self.together = self._classes(np.zeros(op.sites, dtype=int))

    def _colours(self, sites: int) -> np.ndarray:
        """Greedy colouring in the order of site numbers: sites of one colour share no term."""
        neighbours: list[set[int]] = [set() for _ in range(sites)]
        for ranks, where, _ in self.groups:
            if len(ranks) > 1:
                for term in where.tolist():
                    for i in term:
                        neighbours[i].update(term)
        colour = np.full(sites, -1)
        for i in range(sites):
            taken = {int(colour[j]) for j in neighbours[i]}
            colour[i] = next(c for c in range(sites + 1) if c not in taken)
        return colour

    def _classes(self, colour: np.ndarray):
        """[(number of the spin, sites of that spin and one colour, their places among the sites of that spin, whether
        ranks above 1 occur, their slots)]."""
        sites = len(colour)
        classes = []
        for number, (_, sites_of_spin) in enumerate(self.kinds):
            labels = 2 * colour[sites_of_spin] + (self.highest[sites_of_spin] > 1)
            for label in np.unique(labels):
                places = np.flatnonzero(labels == label)
                members = sites_of_spin[places]
                classes.append((number, members, places, bool(label % 2), self._slots(members, sites)))
        return classes

    def _slots(self, members: np.ndarray, sites: int) -> list[_Slot]:
        row = np.full(sites, -1)
        row[members] = np.arange(len(members))
        slots = []
        for g, (ranks, where, _) in enumerate(self.groups):
            for slot in range(len(ranks)):
                terms = np.flatnonzero(row[where[:, slot]] >= 0)
                if len(terms):
                    slots.append(_Slot(g, slot, terms, row[where[terms, slot]]))
        return slots

    def expectations(self, amplitudes: Sequence[np.ndarray]) -> list[np.ndarray]:
        values = [np.zeros((len(amplitudes[0]), len(self.spins), 2 * rank + 1)) for rank in self.ranks]
        for (spin, sites), vectors in zip(self.kinds, amplitudes, strict=True):
            for rank, table in zip(self.ranks, values, strict=True):
                table[:, sites] = _average(vectors, spin, rank)
        return values

    def by_site(self, amplitudes: Sequence[np.ndarray]) -> tuple[np.ndarray, ...]:
        """The vectors of the first batch entry in the order of the sites."""
        vectors: dict[int, np.ndarray] = {}
        for (_, sites), array in zip(self.kinds, amplitudes, strict=True):
            vectors.update(zip(sites.tolist(), array[0], strict=True))
        return tuple(vectors[i] for i in range(len(self.spins)))

    def energy(self, values: list[np.ndarray]) -> np.ndarray:
        total = np.full(len(values[0]) if values else 1, self.constant)
        for ranks, sites, tensor in self.groups:
            total = total + self._contract(values, ranks, sites, tensor, None).sum(axis=1)
        return total

    def _contract(self, values, ranks, sites, tensor, free: int | None) -> np.ndarray:
        """Terms (R, T) contracted with all expectations, or (R, T, 2k+1) with one slot left free."""
        letters = "abcdefghij"[: len(ranks)]
        operands, inputs = [tensor], ["t" + letters]
        for slot, rank in enumerate(ranks):
            if slot != free:
                operands.append(values[self.place[rank]][:, sites[:, slot]])
                inputs.append("rt" + letters[slot])
        if len(operands) == 1:
            return tensor[None]
        out = "rt" + (letters[free] if free is not None else "")
        return np.einsum(",".join(inputs) + "->" + out, *operands, optimize=len(operands) > 2)

    def fields(self, values, members, slots) -> dict[int, np.ndarray]:
        """Effective coefficients by rank (R, sites of the class, 2k+1)."""
        count = len(values[0])
        total: dict[int, np.ndarray] = {}
        for part in slots:
            ranks, sites, tensor = self.groups[part.group]
            rank = ranks[part.slot]
            terms = self._contract(values, ranks, sites[part.terms], tensor[part.terms], part.slot)
            terms = np.broadcast_to(terms, (count, *terms.shape[1:]))
            if rank not in total:
                total[rank] = np.zeros((count, len(members), 2 * rank + 1))
            np.add.at(total[rank], (slice(None), part.rows), terms)
        return total

    def unpacked(self, x: np.ndarray) -> list[np.ndarray]:
        """Normalized amplitudes, one batch entry, from real and imaginary parts of all sites one after the other."""
        amplitudes, at = [], 0
        x = x.view(complex)
        for spin, sites in self.kinds:
            d = round(2 * spin) + 1
            vectors = x[at : at + len(sites) * d].reshape(1, len(sites), d)
            amplitudes.append(vectors / np.linalg.norm(vectors, axis=2, keepdims=True))
            at += len(sites) * d
        return amplitudes

    def value_and_gradient(self, x: np.ndarray) -> tuple[float, np.ndarray]:
        """Energy over `norm`, and its gradient with respect to unnormalized real and imaginary parts of the
        amplitudes.
        """
        x = np.ascontiguousarray(x)
        amplitudes = self.unpacked(x)
        values = self.expectations(amplitudes)
        gradients = [np.zeros_like(a) for a in amplitudes]
        for number, members, places, _, slots in self.together:
            vectors = amplitudes[number][0, places]
            moved = np.zeros_like(vectors)
            for rank, f in self.fields(values, members, slots).items():
                matrices = np.tensordot(f[0], harmonic_operators(self.kinds[number][0], rank), axes=1)
                moved += (matrices @ vectors[..., None])[..., 0]
            moved -= np.einsum("as,as->a", vectors.conj(), moved).real[:, None] * vectors
            gradients[number][0, places] = 2 * moved
        # The energy does not depend on the lengths of the vectors in x, but its gradient scales with their inverse.
        at = 0
        for (spin, sites), gradient in zip(self.kinds, gradients, strict=True):
            size = len(sites) * (round(2 * spin) + 1)
            vectors = x.view(complex)[at : at + size].reshape(len(sites), -1)
            gradient /= np.linalg.norm(vectors, axis=1)[None, :, None]
            at += size
        packed = np.concatenate([g.reshape(-1) for g in gradients]).view(float)
        return float(self.energy(values)[0]) / self.norm, packed / self.norm

    def sweep(self, amplitudes: list[np.ndarray], values: list[np.ndarray]) -> np.ndarray:
        """Update all sites once, in place; returns the energy gained (R,)."""
        gain = np.zeros(len(amplitudes[0]))
        for number, members, places, general, slots in self.classes:
            if not slots:
                continue
            spin = self.kinds[number][0]
            fields = self.fields(values, members, slots)
            before = sum((f * values[self.place[rank]][:, members]).sum(axis=2) for rank, f in fields.items())
            vectors, lowest = (_lowest if general else _lowest_linear)(fields, spin)
            # A site that gains nothing keeps its state, so that degenerate fields cannot make it wander.
            better = before - lowest > 0.0
            vectors = np.where(better[..., None], vectors, amplitudes[number][:, places])
            gain += np.where(better, before - lowest, 0.0).sum(axis=1)
            amplitudes[number][:, places] = vectors
            for rank, table in zip(self.ranks, values, strict=True):
                table[:, members] = _average(vectors, spin, rank)
        return gain


def _lowest(fields: dict[int, np.ndarray], spin: float) -> tuple[np.ndarray, np.ndarray]:
    """Lowest eigenvectors (R, C, d) and eigenvalues (R, C) of sum over ranks of fields times W_kq."""
    matrices = sum(np.tensordot(f, harmonic_operators(spin, rank), axes=1) for rank, f in fields.items())
    values, vectors = np.linalg.eigh(matrices)
    return vectors[..., 0], values[..., 0]


def _lowest_linear(fields: dict[int, np.ndarray], spin: float) -> tuple[np.ndarray, np.ndarray]:
    """As _lowest where only rank 1 occurs: the coherent state against the field."""
    field = fields[1][..., [2, 0, 1]]
    length = np.linalg.norm(field, axis=-1)
    direction = np.where(length[..., None] > 0, -field / np.where(length > 0, length, 1.0)[..., None], [0.0, 0.0, 1.0])
    # W_1 = S / sqrt(S(S+1)).
    return coherent_states(direction, spin), -length * np.sqrt(spin / (spin + 1))


def _average(vectors: np.ndarray, spin: float, rank: int) -> np.ndarray:
    """<W_kq> (..., 2k+1) of vectors (..., d)."""
    moved = np.tensordot(vectors, harmonic_operators(spin, rank), axes=([-1], [2]))
    return np.einsum("...d,...qd->...q", vectors.conj(), moved).real


def _starts(op, field: _MeanField, starts, seed: int, random_starts: int) -> list[np.ndarray]:
    """One array (R, 2 S_i + 1) of start vectors per site."""
    sites = op.sites
    random = np.random.default_rng(seed)
    directions = np.zeros((0, sites, 3)) if starts is None else np.asarray(starts, dtype=float)
    if directions.ndim == 2:
        directions = directions[None]
    if directions.shape[1:] != (sites, 3):
        raise ValueError(f"starts must be unit vectors of shape (R, {sites}, 3), got {directions.shape}")
    if len(directions) == 0:
        random_starts = max(random_starts, 1)
    coherent = (random_starts + 1) // 2
    drawn = random.standard_normal((coherent, sites, 3))
    directions = np.concatenate([directions, drawn / np.linalg.norm(drawn, axis=2, keepdims=True)])
    amplitudes = []
    for spin, own in field.kinds:
        shape = (random_starts - coherent, len(own), round(2 * spin) + 1)
        free = random.standard_normal(shape) + 1j * random.standard_normal(shape)
        free /= np.linalg.norm(free, axis=2, keepdims=True)
        amplitudes.append(np.concatenate([coherent_states(directions[:, own], spin), free]))
    if (field.highest > 1).any():
        # Without any moments the one-site terms alone decide; a little noise lets the pairs choose.
        silent = [np.zeros((2, sites, 2 * rank + 1)) for rank in field.ranks]
        up = np.array([0.0, 0.0, 1.0])
        added = [
            np.repeat(coherent_states(up, spin)[None, None], 2, 0).repeat(len(own), 1) for spin, own in field.kinds
        ]
        for number, members, places, _, slots in field.classes:
            fields = field.fields(silent, members, slots)
            if fields:
                noisy = {
                    rank: f + 1e-3 * (np.abs(f).max() + 1e-12) * random.standard_normal(f.shape)
                    for rank, f in fields.items()
                }
                added[number][:, places] = _lowest(noisy, field.kinds[number][0])[0]
        amplitudes = [np.concatenate(pair) for pair in zip(amplitudes, added, strict=True)]
    return amplitudes
