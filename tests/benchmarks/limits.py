"""How often the stated error of a limit of many sites holds, and how much it exaggerates.

Series with known limits: tests/limit_cases.py. For every group it prints how many limits lie within one, two and four
stated standard errors, the median of stated error / deviation (1.5 for normally distributed deviations), and the median
error. `--unknown` withholds boundary and dimension, `--list` prints all misses beyond two errors. `--compute`
computes energies of open chains, each bond S_i.S_j with anisotropy on z, and appends them to
data/open_chain_energies.csv (all rows: spin 1 to 64, 3/2 to 48, 2 to 48 sites, spin 1/2 with anisotropy 1.5 to 64 and 2
to 46 sites; about an hour).

    python tests/benchmarks/limits.py [--unknown] [--list]
    python tests/benchmarks/limits.py --compute 3/2 4,6,8,10
    python tests/benchmarks/limits.py --compute 1/2 4,6,8,10 --anisotropy 2
"""

import argparse
import sys
from fractions import Fraction
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT), str(ROOT / "tests")]

from limit_cases import TABLE, chain_cases, held_cases, lattice_cases, mixed_cases  # noqa: E402

from manybody.results.scaling_sites import extrapolate  # noqa: E402

ROUNDING = 1e-10


def judge(case, known=True):
    """(deviation, stated standard error) of one case; a known uncertainty of the truth counts to the error."""
    geometry = (case.boundary, case.dimension) if known else (None, None)
    sites = np.array(case.sites, float)
    found = extrapolate(sites, case.energy, case.error, {}, *geometry, case.families())
    return abs(found.values["energy"] - case.truth), np.hypot(found.errors["energy"], case.uncertainty)


def coverage(cases, known=True):
    """{group: ratios deviation / error, errors}, and the misses."""
    table, misses = {}, []
    for case in cases:
        deviation, error = judge(case, known)
        ratio = deviation / np.hypot(error, ROUNDING)
        ratios, errors = table.setdefault(case.group, ([], []))
        ratios.append(ratio)
        errors.append(error)
        if ratio > 2:
            misses.append((case, deviation, error))
    return table, misses


def show(title, table):
    print(title)
    print(f"  {'group':18s} cases  within 1      2      4   error/deviation   median error")
    rows = [("all", [np.concatenate(parts) for parts in zip(*table.values())]), *table.items()]
    for name, (ratios, errors) in rows:
        ratios = np.array(ratios)
        shares = "  ".join(f"{np.mean(ratios < k):5.3f}" for k in (1, 2, 4))
        exaggeration = np.median(1 / np.maximum(ratios, 1e-300))
        print(f"  {name:18s} {len(ratios):5d}  {shares}   {exaggeration:8.1f}          {np.median(errors):.1e}")


def compute(spin, sizes, anisotropy):
    """Append ground energies of open chains to the table."""
    from manybody.model.couplings import exchange
    from manybody.model.quantization import quantize
    from manybody.quantum.ground_state import ground_state
    from manybody.quantum.result import QuantumSettings

    settings = QuantumSettings(accuracy=1e-8 if spin > 1 else 1e-9, max_bond=600)
    for sites in sizes:
        pairs = np.stack([np.arange(sites - 1), np.arange(1, sites)], axis=1)
        start = np.zeros((sites, 3))
        start[:, 2] = (-1.0) ** np.arange(sites)
        operator = quantize(exchange(sites, pairs, [1.0, 1.0, anisotropy]), spin, "wick")
        found = ground_state(operator, settings, start, sites - 1.0)
        if found.status != "converged":
            raise SystemExit(f"{sites} sites: {found.status}; {found.advice}")
        row = f"{spin:g},{anisotropy:g},{sites},{found.energy * spin**2:.12g},{max(found.error * spin**2, 1e-12):.3g}"
        with TABLE.open("a", encoding="utf-8") as file:
            file.write(row + "\n")
        print(row, flush=True)


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--unknown", action="store_true")
    parser.add_argument("--list", action="store_true")
    parser.add_argument("--compute", nargs=2, metavar=("SPIN", "SIZES"))
    parser.add_argument("--anisotropy", type=float, default=1.0)
    chosen = parser.parse_args()
    if chosen.compute:
        spin, sizes = chosen.compute
        compute(float(Fraction(spin)), [int(n) for n in sizes.split(",")], chosen.anisotropy)
        return
    for title, cases in {
        "chains used to choose the constants": chain_cases(),
        "other chains, other sizes": held_cases(),
        "even and odd sizes together": mixed_cases(),
        "lattices": lattice_cases(),
    }.items():
        table, misses = coverage(cases, not chosen.unknown)
        show(title, table)
        for case, deviation, error in misses if chosen.list else []:
            print(f"    {case.group} {case.model} {case.sites}: off by {deviation:.1e}, stated {error:.1e}")


if __name__ == "__main__":
    main()
