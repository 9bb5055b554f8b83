"""How often the stated error of a matrix-product energy holds, and how much it exaggerates.

Runs are stopped early on purpose: small bond dimensions, loose accuracies. Truths come from exact diagonalization of
random clusters, rings, ladders and trees with S = 1/2 ... 5/2, and from Bethe-ansatz chains of up to 256 sites
(data/reference_values.csv).

    python tests/benchmarks/calibration.py [--cases 240] [--seed 7] [--list]
"""

import argparse
import sys
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT), str(ROOT / "tests")]

from reference import reference  # noqa: E402

from manybody.model.couplings import anisotropy, antisymmetric, biquadratic, exchange, field  # noqa: E402
from manybody.model.quantization import SpinOperator, quantize  # noqa: E402
from manybody.quantum.exact import exact_ground_state  # noqa: E402
from manybody.quantum.result import GroundState, QuantumSettings  # noqa: E402
from manybody.quantum.sweeps import matrix_product_ground_state  # noqa: E402

BETHE_RINGS = {"A030": 20, "A032": 32, "A033": 48, "A035": 128}
BETHE_OPEN = {"A029": 16, "A037": 32, "A039": 128}
LARGEST_SPACE = 6000


@dataclass(frozen=True)
class Outcome:
    """energy - truth and the stated error, with what was solved."""

    label: str
    deviation: float
    error: float
    result: GroundState

    @property
    def holds(self) -> bool:
        # Rounding of the truth itself (Lanczos to about 1e-12 relative) counts for neither side.
        return -1e-9 <= self.deviation <= self.error + 1e-11 * max(1.0, abs(self.result.energy))


def graph(kind: str, n: int, rng: np.random.Generator) -> np.ndarray:
    chain = [(i, i + 1) for i in range(n - 1)]
    if kind == "ring":
        return np.array([*chain, (0, n - 1)] if n > 2 else chain)
    if kind == "ladder":
        n -= n % 2
        return np.array([(i, i + 2) for i in range(n - 2)] + [(i, i + 1) for i in range(0, n, 2)])
    if kind == "tree":
        return np.array([(int(rng.integers(0, i)), i) for i in range(1, n)])
    if kind == "cluster":
        extra = {tuple(sorted(rng.choice(n, 2, replace=False).tolist())) for _ in range(n)}
        return np.array(sorted(set(chain) | extra))
    return np.array(chain)


def random_case(rng: np.random.Generator) -> tuple[str, SpinOperator]:
    """A random model small enough for exact diagonalization."""
    spin = float(rng.choice([0.5, 0.5, 1.0, 1.0, 1.5, 2.0, 2.5]))
    most = int(np.log(LARGEST_SPACE) / np.log(2 * spin + 1))
    kind = str(rng.choice(["chain", "ring", "ladder", "tree", "cluster"]))
    n = int(rng.integers(max(3, most - 3), most + 1))
    if kind == "ladder":
        n -= n % 2
    pairs = graph(kind, n, rng)
    flavour = str(
        rng.choice(["uniform", "random", "xxz", "field", "antisymmetric", "canted", "anisotropic", "biquadratic"])
    )
    f = exchange(n, pairs, 1.0)
    if flavour == "random":
        f = exchange(n, pairs, rng.normal(size=(len(pairs), 1, 1)))
    elif flavour == "xxz":
        f = exchange(n, pairs, [1.0, 1.0, float(rng.uniform(-0.5, 2))])
    elif flavour == "field":
        f = f + field(n, np.arange(n), [0, 0, float(rng.uniform(0.1, 3))])
    elif flavour == "antisymmetric":
        f = f + antisymmetric(n, pairs, [0, 0, float(rng.uniform(0.1, 1))])
    elif flavour == "canted":
        f = exchange(n, pairs, [1.0, 0.6, 1.3]) + field(n, np.arange(n), rng.uniform(0.1, 1, 3))
    elif flavour == "anisotropic":
        f = f + anisotropy(n, np.arange(n), [0, 0, 1], float(rng.uniform(-1, 1)))
    elif flavour == "biquadratic":
        f = f + biquadratic(n, pairs, float(rng.uniform(-0.5, 0.5)))
    return f"{kind} N={n} S={spin:g} {flavour}", quantize(f, spin)


def random_settings(rng: np.random.Generator) -> QuantumSettings:
    """Either the bond dimension or the accuracy stops the sweeps early."""
    if rng.random() < 0.6:
        return QuantumSettings(accuracy=1e-10, max_bond=int(rng.integers(3, 17)))
    return QuantumSettings(accuracy=float(10.0 ** rng.uniform(-7, -3)), max_bond=200)


def run(label: str, op: SpinOperator, truth: float, settings: QuantumSettings, scale: float) -> Outcome:
    result = matrix_product_ground_state(op, settings, scale=scale)
    return Outcome(label, result.energy - truth, result.error, result)


def random_outcomes(cases: int, seed: int):
    for number in range(cases):
        rng = np.random.default_rng([seed, number])
        label, op = random_case(rng)
        settings = random_settings(rng)
        truth = exact_ground_state(op, QuantumSettings(accuracy=1e-12)).energy
        scale = abs(truth - op.symbol.mean) or 1.0
        yield run(f"{number} {label} D<={settings.max_bond} a={settings.accuracy:.0e}", op, truth, settings, scale)


def bethe_outcomes(bonds=(8, 16, 32, 64)):
    for identifier, n in (BETHE_RINGS | BETHE_OPEN).items():
        truth = reference(identifier).value
        pairs = graph("ring" if identifier in BETHE_RINGS else "chain", n, np.random.default_rng(0))
        op = quantize(0.25 * exchange(n, pairs, 1.0), 0.5)
        for bond in bonds:
            settings = QuantumSettings(accuracy=1e-9, max_bond=bond)
            yield run(f"Bethe {identifier} N={n} D<={bond}", op, truth, settings, 0.25 * n)


def summary(outcomes: list[Outcome]) -> tuple[float, float, int]:
    """Share of cases that hold; median of error / deviation over deviations above 1e-10; how many those are."""
    coverage = sum(outcome.holds for outcome in outcomes) / len(outcomes)
    ratios = [outcome.error / outcome.deviation for outcome in outcomes if outcome.deviation > 1e-10]
    return coverage, float(np.median(ratios)) if ratios else float("nan"), len(ratios)


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--cases", type=int, default=240)
    parser.add_argument("--seed", type=int, default=7)
    parser.add_argument("--list", action="store_true", help="one line per case")
    options = parser.parse_args()
    begin = time.perf_counter()
    groups = {"random": [], "Bethe": []}
    for name, source in (("random", random_outcomes(options.cases, options.seed)), ("Bethe", bethe_outcomes())):
        for outcome in source:
            groups[name].append(outcome)
            if options.list or not outcome.holds:
                ratio = outcome.error / outcome.deviation if outcome.deviation > 0 else float("inf")
                print(
                    f"{'ok  ' if outcome.holds else 'MISS'} {outcome.label}: deviation {outcome.deviation:.2e} "
                    f"error {outcome.error:.2e} ratio {ratio:.2g} {outcome.result.status}",
                    flush=True,
                )
    everything = groups["random"] + groups["Bethe"]
    for name, outcomes in {**groups, "all": everything}.items():
        coverage, median, counted = summary(outcomes)
        print(
            f"{name}: {len(outcomes)} cases, coverage {100 * coverage:.1f} %, "
            f"median error / deviation {median:.2f} over {counted}"
        )
    print(f"{time.perf_counter() - begin:.0f} s")
    coverage, median, _ = summary(everything)
    return 0 if coverage >= 0.95 and median < 10 else 1


if __name__ == "__main__":
    sys.exit(main())
