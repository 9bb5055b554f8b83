"""Small random operators with and without a conserved charge, for the tests of the sweeps."""

import numpy as np
from spin_models import complete

from manybody.model import couplings
from manybody.model.quantization import quantize


def random_operator(rng, conserved):
    """Two to five spins 1/2 and 1: exchange, antisymmetric exchange, fields, single-site and three-site terms."""
    n = int(rng.integers(2, 6))
    spins = rng.choice([0.5, 1.0], n)
    pairs = np.array([p for p in complete(n) if rng.random() < 0.7] or [(0, n - 1)])
    matrices = rng.standard_normal((len(pairs), 3, 3))
    strengths = rng.standard_normal(n)
    if conserved:
        c, d, j = rng.standard_normal((3, len(pairs)))
        matrices = np.zeros((len(pairs), 3, 3))
        matrices[:, 0, 0] = matrices[:, 1, 1] = c
        matrices[:, 0, 1], matrices[:, 1, 0] = d, -d
        matrices[:, 2, 2] = j
    f = couplings.exchange(n, pairs, matrices) + 0.7
    axis = [0, 0, 1.0] if conserved else rng.standard_normal(3)
    for site in range(n):
        f = f + couplings.field(n, [site], strengths[site] * np.array(axis))
        f = f + couplings.anisotropy(n, [site], axis, float(strengths[site]))
    if n > 2:
        three = {(0, 0, 1): 1.0} if conserved else {(1, 0, 0): 0.5, (0, 1, 0): 0.3, (0, 0, 1): 1.0}
        f = f + couplings.product(n, [(0, 1, n - 1)], [three] * 3)
    return quantize(f, spins)
