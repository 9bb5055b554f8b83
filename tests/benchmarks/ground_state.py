"""Time to a wanted relative energy error against quimb's two-site sweeps, one BLAS thread each, alternately in one
process.

    python tests/benchmarks/ground_state.py [case ...]
        half one two five cylinder; one line a case, ending with `ratio R`
    python tests/benchmarks/ground_state.py --profile [case ...]
        share of time in matrix products, GFLOP/s, other work per bond

Both sides report the energy after every half sweep (ours) or sweep (quimb); the clock stops when it first is within the
wanted relative error of the reference. Ours runs with default settings before and after quimb and counts with the mean;
sector search and set-up are inside. quimb gets a real operator and a growing bond schedule, and is stopped at
--patience seconds: the ratio is then a lower limit.
"""

import os

for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(name, "1")

import argparse  # noqa: E402
import contextlib  # noqa: E402
import sys  # noqa: E402
import time  # noqa: E402
from collections.abc import Callable  # noqa: E402
from dataclasses import dataclass  # noqa: E402
from pathlib import Path  # noqa: E402

import numpy as np  # noqa: E402

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT), str(ROOT / "tests")]

from reference import reference  # noqa: E402

from manybody.model.couplings import exchange  # noqa: E402
from manybody.model.quantization import SpinOperator, quantize  # noqa: E402
from manybody.quantum.result import QuantumSettings  # noqa: E402
from manybody.quantum.sweeps import matrix_product_ground_state  # noqa: E402


def chain(n: int) -> np.ndarray:
    return np.array([(i, i + 1) for i in range(n - 1)])


def cylinder(length: int, around: int) -> np.ndarray:
    along = [(around * x + y, around * (x + 1) + y) for x in range(length - 1) for y in range(around)]
    return np.array(
        along + [(around * x + y, around * x + (y + 1) % around) for x in range(length) for y in range(around)]
    )


def neel(n: int, around: int = 1) -> np.ndarray:
    signs = np.array([(-1.0) ** (i // around + i % around) for i in range(n)])
    return signs[:, None] * np.array([0.0, 0.0, 1.0])


def open_bethe_energy(n: int) -> float:
    """Open S = 1/2 chain of even length from the Bethe equations (Alcaraz et al. 1987, J. Phys. A 20, 6397), by
    fixed-point iteration."""
    numbers = np.arange(1, n // 2 + 1)
    x = np.tan(np.pi * numbers / (2 * n + 2)) / 2
    for _ in range(20000):
        pairs = np.arctan(x[:, None] - x) + np.arctan(x[:, None] + x)
        phase = (np.pi * numbers + pairs.sum(axis=1) - np.arctan(2 * x)) / (2 * n)
        new = np.tan(phase) / 2
        if np.abs(new - x).max() < 1e-15 * np.abs(x).max():
            break
        x = 0.5 * (x + new)
    return (n - 1) / 4 - float((0.5 / (x * x + 0.25)).sum())


@dataclass(frozen=True)
class Case:
    """reference: energy of H = sum S_i.S_j; relative: wanted error; bonds: quimb's schedule."""

    sites: int
    spin: float
    pairs: np.ndarray
    reference: float
    relative: float
    bonds: tuple[int, ...]
    around: int = 1

    @property
    def operator(self) -> SpinOperator:
        return quantize(self.spin**2 * exchange(self.sites, self.pairs, 1.0), self.spin)

    @property
    def target(self) -> float:
        return self.reference + self.relative * abs(self.reference)


# References of all but `half`: this engine at max_bond = 800, accuracy 1e-9; see `--reference`.
REFERENCES = {"one": -88.48667423, "two": -148.25537841, "five": -404.67856308, "cylinder": -71.842086}


def cases() -> dict[str, Case]:
    growing = (10, 20, 40, 80, 120, 160, 200, 300, 400, 600)
    return {
        "half": Case(64, 0.5, chain(64), open_bethe_energy(64), 1e-6, (10, 20, 40, 80, 120, 160)),
        "one": Case(64, 1, chain(64), REFERENCES["one"], 1e-6, (10, 20, 40, 80, 120, 160, 200)),
        "two": Case(32, 2, chain(32), REFERENCES["two"], 1e-4, growing),
        "five": Case(16, 5, chain(16), REFERENCES["five"], 2e-4, growing),
        "cylinder": Case(32, 1, cylinder(8, 4), REFERENCES["cylinder"], 1e-4, growing, 4),
    }


class Reached(Exception):
    """The target is met: nothing more to time."""


def ours(case: Case, settings: QuantumSettings | None = None, stop: bool = False):
    """(seconds to the target, bond dimension there, seconds of the whole run, result); `stop` ends the run at the
    target, result None."""
    reached: list[tuple[float, int]] = []
    begin = time.perf_counter()

    def progress(facts: dict) -> None:
        if not reached and facts["energy"] <= case.target:
            reached.append((time.perf_counter() - begin, facts["bond_dimension"]))
            if stop:
                raise Reached

    scale = case.spin**2 * len(case.pairs)
    start = neel(case.sites, case.around)
    result = None
    with contextlib.suppress(Reached):
        result = matrix_product_ground_state(case.operator, settings or QuantumSettings(), start, scale, progress)
    whole = time.perf_counter() - begin
    seconds, bond = reached[0] if reached else (float("nan"), 0)
    return seconds, bond, whole, result


def quimb_operator(case: Case):
    """The same operator for quimb: sum of S^z S^z + (S^+ S^- + S^- S^+)/2 with one channel per open site and operator,
    real."""
    import quimb as qu
    import quimb.tensor as qtn

    d = round(2 * case.spin) + 1
    up = np.real(qu.spin_operator("+", S=case.spin))
    z = np.real(qu.spin_operator("z", S=case.spin))
    letters = ((up, up.T / 2), (up.T, up / 2), (z, z))
    pairs = {tuple(sorted(pair)) for pair in case.pairs.tolist()}
    last = {i: max((b for a, b in pairs if a == i), default=i) for i in range(case.sites)}
    arrays = []
    alive: list[int] = []
    for site in range(case.sites):
        following = [i for i in [*alive, site] if last[i] > site]
        w = np.zeros((2 + 3 * len(alive), 2 + 3 * len(following), d, d))
        w[0, 0] = w[1, 1] = np.eye(d)
        for a, i in enumerate(alive):
            for k, (_, second) in enumerate(letters):
                if (i, site) in pairs:
                    w[2 + 3 * a + k, 1] += second
                if i in following:
                    w[2 + 3 * a + k, 2 + 3 * following.index(i) + k] = np.eye(d)
        if site in following:
            for k, (first, _) in enumerate(letters):
                w[0, 2 + 3 * following.index(site) + k] = first
        arrays.append(w)
        alive = following
    arrays[0], arrays[-1] = arrays[0][0], arrays[-1][:, 1]
    return qtn.MatrixProductOperator(arrays, shape="lrud")


def theirs(case: Case, patience: float):
    """(seconds to the target or None, seconds spent, relative error reached)."""
    import quimb.tensor as qtn

    operator = quimb_operator(case)
    begin = time.perf_counter()
    search = qtn.DMRG2(operator, bond_dims=list(case.bonds), cutoffs=1e-10)
    energy = np.inf
    for sweep in range(60):
        search.solve(tol=0.0, max_sweeps=1, bond_dims=case.bonds[min(sweep, len(case.bonds) - 1)], verbosity=0)
        energy = float(np.real(search.energy))
        spent = time.perf_counter() - begin
        if energy <= case.target:
            return spent, spent, (energy - case.reference) / abs(case.reference)
        if spent > patience:
            break
    return None, spent, (energy - case.reference) / abs(case.reference)


def compare(name: str, case: Case, patience: float) -> None:
    first = ours(case)
    other, spent, reached = theirs(case, patience)
    second = ours(case, stop=True)
    mine = (first[0] + second[0]) / 2
    verdict = (
        f"quimb {other:.2f} s" if other else f"quimb not in {spent:.0f} s (at {reached:.1e}), ratio a lower limit,"
    )
    whole = f"whole run {first[2]:.2f} s, {first[3].status}, error {first[3].error / abs(case.reference):.1e}"
    print(
        f"{name} to {case.relative:.0e}: ours {mine:.3f} s (D = {first[1]}; {whole}), {verdict} "
        f"ratio {(other or spent) / mine:.1f}",
        flush=True,
    )


def warm_up(with_quimb: bool) -> None:
    """Compiled code and contraction paths are loaded before any clock runs."""
    for spin in (0.5, 1.0, 2.0):
        small = Case(8, spin, chain(8), 1.0, 1.0, (8,))
        ours(small)
        if with_quimb:
            theirs(small, 1.0)


def dgemm_peak() -> float:
    """GFLOP/s of one large product."""
    a = np.random.default_rng(0).standard_normal((1000, 1000))
    best = 0.0
    for _ in range(5):
        begin = time.process_time()
        a @ a
        best = max(best, 2e9 / (time.process_time() - begin) / 1e9)
    return best


@dataclass
class Products:
    """Processor time of the matrix products of a run: in a second, equal run products of the same shapes follow every
    compiled step and are timed, so that the first run is undisturbed."""

    multiply: Callable
    source: np.ndarray
    target: np.ndarray
    replaying: bool = False
    counting: bool = False
    seconds: float = 0.0
    flops: float = 0.0
    solves: int = 0
    steps: float = 0.0

    def after(self, function: Callable, shapes: Callable) -> Callable:
        """The function, followed by products of the shapes (rows, inner, columns) that shapes(arguments, outcome)
        lists."""

        def replaced(*arguments):
            outcome = function(*arguments)
            if self.counting:
                self.repeat(shapes(arguments, outcome))
            return outcome

        return replaced

    def repeat(self, shapes) -> None:
        shapes = np.asarray(shapes, np.int64).reshape(-1, 3)
        shapes = np.ascontiguousarray(shapes[shapes.min(axis=1, initial=1) > 0])
        begin = time.process_time()
        self.multiply(shapes, self.source, self.target)
        self.seconds += time.process_time() - begin
        self.flops += 2.0 * float(shapes.prod(axis=1).sum())


def cut_shapes(shapes, ranks, kept) -> list[tuple[int, int, int]]:
    """Products (rows, inner, columns) of spectra.spectra and split.parts."""
    result = []
    for (m, n), r, k in zip(shapes.tolist(), ranks.tolist(), kept.tolist(), strict=True):
        side = min(m, n)
        result.append((side, max(m, n), side))
        if r < side:
            result += [(r, side, r), (r, r, side)]
        if m > n:
            result.append((m, n, k))
        if m > n or r < side:
            result += [(k, m, k), (m, k, k)]
        result.append((k, k, n) if m > n and r == side else (k, m, n))
    return result


def direction_shapes(groups, turned_groups, dims, probes, added) -> list[tuple[int, int, int]]:
    """Products of expansion.directions."""
    result = []
    columns = (groups[:, 0], groups[:, 1], turned_groups[:, 0], dims, probes, added)
    for m, n, r, d, k, a in zip(*(column.tolist() for column in columns), strict=True):
        result += [(k, m, n), (r, n, k), (d, r, k), (r, d, k), (k, r, k), (r, k, k), (d, r, a), (r, d, a)]
        result += [(a, r, a), (r, a, a)]
    return result


def profile(names) -> None:
    """Share of matrix products in the steps of sweeps at the full bond dimension, and the other work of a step (of two
    runs the quicker, which other work of the machine disturbed less)."""
    from manybody.quantum import blocks, contraction, expansion, lanczos, one_site, spectra, two_site
    from manybody.quantum.compiled import compiled
    from manybody.quantum.products import product
    from manybody.quantum.schedule import Run

    @compiled
    def multiply(shapes, source, target):
        place = 0
        for g in range(shapes.shape[0]):
            m, k, n = shapes[g, 0], shapes[g, 1], shapes[g, 2]
            if place + (m + n) * k > source.size:
                place = 0
            product(target, 0, source, place, source, place + m * k, m, k, n)
            place += (m + n) * k

    clock = Products(multiply, np.random.default_rng(0).standard_normal(8_000_000), np.empty(4_000_000))

    # Shapes (rows, inner, columns) of the products in the two kinds of steps. What a step does inside is done again
    # here: its outcome does not tell all shapes.
    def effective(left, right, local, operator):
        steps = contraction.plan(left, right, local, operator, operator[3], -1, right)
        return np.concatenate([steps[0][:, :3], steps[3][:, :3]])

    def environment(left, right, local, operator):
        steps = contraction.plan(left, right, local, operator, -1, operator[2], right)
        second = np.stack([steps[5][:, 1], steps[5][:, 0], right[1]], axis=1)
        return np.concatenate([steps[0][:, :3], second])

    def enlarge(residual, fraction, bond_after):
        _, _, left, bond, local, operator, _, _, turned, turned_local, turned_operator, reach, total, _ = residual
        near = contraction.plan(left, bond, local, operator, -1, operator[3], reach)
        turned_bond, turned_reach = (total - bond[0], bond[1]), (total - reach[0], reach[1])
        far = contraction.plan(turned, turned_bond, turned_local, turned_operator, -1, turned_operator[2], turned_reach)
        charges, dims = reach
        added = -dims
        added[np.searchsorted(charges, bond_after[0])] += bond_after[1]
        added[added < 0] = 0
        probes = expansion.samples(fraction, near[5][:, 0], far[5][:, 0], dims)
        new = total - bond_after[0], bond_after[1]
        return np.concatenate(
            [
                near[0][:, :3], far[0][:, :3], direction_shapes(near[5], far[5], dims, probes, added),
                environment(turned, new, turned_local, turned_operator),
            ]
        )  # fmt: skip

    def of_pairs(arguments, outcome):
        pair, before, after, both, operator, limit, allowed, *rest = arguments
        _, _, _, left, middle, right, first, second, _ = pair
        around = *left, *right, first, second
        rows, columns = blocks.by_right(*left, middle[0], first)[1], blocks.by_left(*middle, *right, second)[2]
        local, kept = blocks.pair_charges(first, second), outcome[3:5]
        found = lanczos.lowest(two_site.join(pair), before, after, left, right, local, both, *rest)
        reached = blocks.reachable(left[0], right[0], first, second)
        shapes = blocks.pair_shapes(reached, *around)
        ranks = spectra.spectra(blocks.cut_pair(found[1], reached, *around), shapes, limit, allowed)[2]
        dims = np.zeros_like(reached)
        dims[np.searchsorted(reached, kept[0])] = kept[1]
        return np.concatenate(
            [
                np.stack([rows, middle[1], columns], axis=1), *[effective(left, right, local, both)] * found[3],
                cut_shapes(shapes, ranks, dims), environment(left, kept, first, operator),
            ]
        )  # fmt: skip

    def of_sites(arguments, outcome):
        residual, fraction, most, seed, _, _, *rest = arguments
        _, before, left, _, local, operator, _, _, turned, next_local, _, _, total, scratch = residual
        centre, _, charges, dims, outside, _ = expansion.enlarge(residual, fraction, most, seed)
        bond, kept, after = (charges, dims), outcome[3:5], (total - turned[0], turned[1])
        found = lanczos.lowest(centre, before, outside, left, bond, local, operator, *rest, scratch)
        shapes = np.stack([blocks.by_right(*left, charges, local)[1], dims], axis=1)
        new = np.zeros_like(dims)
        new[[charges.tolist().index(charge) for charge in kept[0]]] = kept[1]
        return np.concatenate(
            [
                enlarge(residual, fraction, bond), *[effective(left, bond, local, operator)] * found[3],
                cut_shapes(shapes, shapes.min(axis=1), new),
                np.stack([new, dims, blocks.by_left(*bond, *after, next_local)[2]], axis=1),
                environment(left, kept, local, operator),
            ]
        )  # fmt: skip

    real = [(two_site, two_site.renew, of_pairs), (one_site, one_site.renew, of_sites)]
    real_sweep = Run._half_sweep
    full = 0

    def half_sweep(run):
        # More Lanczos vectors than usual are no cost of the bond: they are spent where sweeps crawl.
        counts = run.chain.bond_dimension >= full and run.vectors == run.limits.vectors
        clock.counting = counts and clock.replaying
        begin = time.process_time()
        outcome = real_sweep(run)
        if counts and not clock.replaying:
            clock.steps += time.process_time() - begin
            clock.solves += run.chain.length - 1
        clock.counting = False
        return outcome

    for module, function, listing in real:
        module.renew = clock.after(function, listing)
    Run._half_sweep = half_sweep
    clock.repeat([(1, 1, 1)])
    try:
        print(f"dgemm peak {dgemm_peak():.1f} GFLOP/s")
        for name, case in cases().items():
            if names and name not in names:
                continue
            for bond in (40, 80) if name in ("half", "one") else (40, 500):
                full = bond
                clock.seconds = clock.flops = 0.0
                taken = []
                for clock.replaying in (False, False, True):
                    if not clock.replaying:
                        clock.steps, clock.solves = 0.0, 0
                    ours(case, QuantumSettings(max_bond=bond, accuracy=1e-12))
                    taken.append(clock.steps)
                clock.steps = min(taken)
                if not clock.solves:
                    print(f"profile {name} D = {bond}: the sweeps stopped at a smaller bond dimension", flush=True)
                    continue
                print(
                    f"profile {name} D = {bond}: {clock.solves} steps of {1e3 * clock.steps / clock.solves:.2f} ms, "
                    f"products {100 * clock.seconds / clock.steps:.0f} % at {clock.flops / clock.seconds / 1e9:.1f} "
                    f"GFLOP/s, other work {1e3 * (clock.steps - clock.seconds) / clock.solves:.2f} ms a step",
                    flush=True,
                )
    finally:
        for module, function, _ in real:
            module.renew = function
        Run._half_sweep = real_sweep


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("names", nargs="*", choices=[[], *cases()], default=[])
    parser.add_argument("--profile", action="store_true")
    parser.add_argument("--patience", type=float, default=100.0)
    parser.add_argument("--reference", action="store_true", help="compute the stored reference energies anew")
    options = parser.parse_args()
    known = reference("A037").value
    if abs(open_bethe_energy(32) - known) > 1e-9:
        raise SystemExit("the Bethe-ansatz solution misses its check value")
    warm_up(not (options.profile or options.reference))
    if options.profile:
        profile(options.names)
        return 0
    for name, case in cases().items():
        if options.names and name not in options.names:
            continue
        if options.reference:
            result = ours(case, QuantumSettings(accuracy=1e-9, max_bond=800))[3]
            print(f"{name} {result.energy:.8f} error {result.error:.1e} D = {result.bond_dimension}", flush=True)
        else:
            compare(name, case, options.patience)
    return 0


if __name__ == "__main__":
    sys.exit(main())
