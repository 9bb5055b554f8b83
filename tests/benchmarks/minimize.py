"""Speed of the classical branch as ratios measured in one run; by hand: python tests/benchmarks/minimize.py [--large]

Prints, beside what is asked for:

- value and gradient of 64 configurations on 16 x 16 triangular sites over the scipy CSR product of the coupling matrix
  with the same batch (at most 3)
- scipy's L-BFGS-B on angles with analytic gradient over `minimize`, 64 starts on the same lattice (at least 10)
- bytes of an energy function per bond at three sizes (constant)
- minimum with certificate of 64 x 64 square sites with random bonds (under 60 s)
- time outside the two branches per point of a study of 200 small points, start of the program included (at most 20 ms)

With --large also 10^6 sites of square and triangular lattices: time and peak memory, and the energy beside that of the
best single spiral.
"""

import json
import resource
import subprocess
import sys
import tempfile
import time
import tracemalloc
from pathlib import Path

import numpy as np
from scipy.optimize import minimize as scipy_minimize

from manybody.classical.minimize import MinimizeSettings, minimize
from manybody.classical.search import find_ground_state
from manybody.classical.sphere_product import random_points
from manybody.model import lattice as lattices
from manybody.model.couplings import exchange, field
from manybody.results.dataset import open_results


def triangular(extent):
    lattice = lattices.triangular([extent, extent], periodic=True)
    return exchange(lattice.sites, lattice.pairs("nearest"), 1.0)


def best_of(call, repeats=20):
    times = []
    for _ in range(repeats):
        began = time.perf_counter()
        call()
        times.append(time.perf_counter() - began)
    return min(times)


def evaluation():
    f = triangular(16)
    n = random_points(np.random.default_rng(0), f.sites, (64,))
    matrix = f.quadratic_form()[0]
    columns = np.ascontiguousarray(n.reshape(64, -1).T)
    ours, plain = best_of(lambda: f.value_and_gradient(n)), best_of(lambda: matrix @ columns)
    print(
        f"value and gradient / CSR product: {ours / plain:.2f}  ({1e3 * ours:.2f} ms / {1e3 * plain:.2f} ms; at most 3)"
    )


def angles_search(f, starts):
    """One scipy search per start, on polar and azimuthal angles; returns the energies and the largest gradient left."""
    matrix = f.quadratic_form()[0]

    def value_and_gradient(angles):
        theta, phi = angles.reshape(2, -1)
        st, ct, sp, cp = np.sin(theta), np.cos(theta), np.sin(phi), np.cos(phi)
        n = np.stack([st * cp, st * sp, ct], axis=1)
        slope = (matrix @ n.reshape(-1)).reshape(n.shape)
        by_theta = np.sum(slope * np.stack([ct * cp, ct * sp, -st], axis=1), axis=1)
        by_phi = np.sum(slope * np.stack([-st * sp, st * cp, np.zeros_like(st)], axis=1), axis=1)
        return 0.5 * np.sum(slope * n), np.concatenate([by_theta, by_phi])

    energies, slopes = [], []
    for n in starts:
        angles = np.concatenate([np.arccos(n[:, 2]), np.arctan2(n[:, 1], n[:, 0])])
        options = {"maxiter": 20_000, "maxfun": 20_000, "ftol": 1e-14, "gtol": 1e-8}
        found = scipy_minimize(value_and_gradient, angles, jac=True, method="L-BFGS-B", options=options)
        energies.append(found.fun)
        slopes.append(np.abs(found.jac).max())
    return np.array(energies), max(slopes)


def search():
    f = triangular(16)
    minimize(f, MinimizeSettings(starts=2))  # compile
    began = time.perf_counter()
    ours = minimize(f, MinimizeSettings(starts=64))
    seconds = time.perf_counter() - began
    began = time.perf_counter()
    energies, slope = angles_search(f, random_points(np.random.default_rng(0), f.sites, (64,)))
    reference = time.perf_counter() - began
    hits = sum(m.count for m in ours.minima if m.energy < ours.energy + 1e-6)
    print(
        f"L-BFGS-B on angles / minimize: {reference / seconds:.1f}  "
        f"({reference:.2f} s / {seconds:.2f} s; at least 10)\n"
        f"    lowest {energies.min():.9f} ({(energies < energies.min() + 1e-6).sum()} of 64, gradient {slope:.0e}) "
        "against "
        f"{ours.energy:.9f} ({hits} of 64, gradient {ours.gradient_norm:.0e})"
    )


def memory():
    for extent in (32, 64, 128):
        lattice = lattices.triangular([extent, extent], periodic=True)
        pairs = lattice.pairs("nearest")
        n = random_points(np.random.default_rng(0), lattice.sites)
        tracemalloc.start()
        f = exchange(lattice.sites, pairs, 1.0)
        f.value_and_gradient(n)
        held, peak = tracemalloc.get_traced_memory()
        tracemalloc.stop()
        print(
            f"memory at {len(pairs):6d} bonds: {held / len(pairs):.0f} bytes per bond held, "
            f"{peak / len(pairs):.0f} at the peak"
        )


def certificate():
    lattice = lattices.square([64, 64], periodic=True)
    pairs = lattice.pairs("nearest")
    for kind in ("gaussian", "plus-minus"):
        generator = np.random.default_rng(0)
        bonds = (
            generator.standard_normal(len(pairs)) if kind == "gaussian" else generator.choice([-1.0, 1.0], len(pairs))
        )
        f = exchange(lattice.sites, pairs, bonds[:, None, None])
        began = time.perf_counter()
        found = find_ground_state(f, starts=7)
        seconds = time.perf_counter() - began
        print(
            f"64 x 64 {kind} bonds: {seconds:.1f} s for minimum and certificate (under 60), "
            f"method {found.certificate.method}, gap {found.certificate.gap / abs(found.result.energy):.1e} relative"
        )


def study():
    """A whole run in a process of its own: what is left of its time after the seconds its parts report."""
    values = ", ".join(f"{k / 100:g}" for k in range(1, 51))
    text = (
        '[lattice]\nshape = "ring"\nsites = [4, 6]\n[[term]]\nexchange = [1, 1, "d"]\n'
        f'[parameters]\nd = [{values}]\n[quantum]\nspin = "1/2"\nrule = ["wick", "toeplitz"]\n'
    )
    with tempfile.TemporaryDirectory() as folder:
        file, out = Path(folder) / "study.toml", Path(folder) / "out"
        file.write_text(text, encoding="utf-8")
        command = [sys.executable, "-m", "manybody.command", "run", str(file), "--out", str(out), "--workers", "0"]
        began = time.perf_counter()
        subprocess.run(command, check=True, capture_output=True)
        seconds = time.perf_counter() - began
        spent = json.loads(open_results(out).attrs["seconds_by_part"])
    outside = (seconds - sum(spent.values())) / 200
    print(f"study of 200 points, N <= 6, S = 1/2: {1e3 * outside:.1f} ms a point outside the branches (at most 20)")


def triangular_with(extent, periodic, couplings=(1.0, 1.0, 1.0), strength=0.0):
    lattice = lattices.triangular([extent, extent], periodic=periodic)
    f = field(lattice.sites, range(lattice.sites), [0.0, 0.0, strength])
    for direction, coupling in zip("abc", couplings, strict=True):
        f = f + exchange(lattice.sites, lattice.pairs(direction), coupling)
    return f


def spiral_energy(extent, periodic, couplings=(1.0, 1.0, 1.0), strength=0.0):
    """Energy per site of the best single spiral, bent towards the field: with its wavevector q and the angle a between
    the spins and the field, sum over the bonds J (cos^2 a + sin^2 a cos q.r) - N h cos a. On a torus q fits the
    periods.
    """
    axis = np.arange(0.0, 2 * np.pi, 2 * np.pi / (extent if periodic else 1200))
    x, y = np.meshgrid(axis, axis, indexing="ij")
    along = extent if periodic else extent - 1
    bonds = np.array([along * extent, extent * along, along**2]) / extent**2 * couplings
    shared = np.array([np.cos(x), np.cos(y), np.cos(x - y)])
    spiral, uniform = np.einsum("d,dxy->xy", bonds, shared).min(), bonds.sum()
    cosine = min(1.0, strength / max(2 * (uniform - spiral), 1e-300))
    return uniform * cosine**2 + spiral * (1 - cosine**2) - strength * cosine


LARGE_CASES = {
    "999 x 999 torus": (999, True),
    "1000 x 1000 torus": (1000, True),
    "1000 x 1000 open": (1000, False),
    "1000 x 1000 torus, couplings 1 0.6 0.6": (1000, True, (1.0, 0.6, 0.6)),
    "1000 x 1000 open, couplings 1 0.6 0.6": (1000, False, (1.0, 0.6, 0.6)),
    "1000 x 1000 torus in a field of 1": (1000, True, (1.0, 1.0, 1.0), 1.0),
}


def large_case(name):
    began = time.perf_counter()
    if name == "square":
        lattice = lattices.square([1000, 1000], periodic=True)
        f, reference = exchange(lattice.sites, lattice.pairs("nearest"), 1.0), -2.0
    else:
        f, reference = triangular_with(*LARGE_CASES[name]), spiral_energy(*LARGE_CASES[name])
    built = time.perf_counter() - began
    found = find_ground_state(f)
    seconds = time.perf_counter() - began
    result, peak = found.result, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
    print(
        f"{name}: {seconds:.0f} s ({time.process_time():.0f} s of processor, {built:.0f} s to build), "
        f"peak {peak:.2f} GiB, energy per site "
        f"{result.energy / f.sites:.10f}, spiral {reference:.10f}, relative gradient {result.gradient_norm:.0e}, "
        f"converged {result.converged}, certified {found.certificate.certified}, {result.starts_used} starts",
        flush=True,
    )


def large():
    """Every case in a process of its own, for the sake of its peak memory."""
    for name in ("square", *LARGE_CASES):
        subprocess.run([sys.executable, __file__, "--case", name], check=True)


if __name__ == "__main__":
    if "--case" in sys.argv:
        large_case(sys.argv[-1])
        sys.exit()
    evaluation()
    search()
    memory()
    certificate()
    study()
    if "--large" in sys.argv:
        large()
