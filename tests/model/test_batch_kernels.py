"""The compiled path for large batches gives what the plain one gives."""

import numpy as np
import pytest

from manybody.model import energy
from manybody.model.couplings import anisotropy, exchange, field


@pytest.mark.parametrize("batch", [4, 8, 13])
def test_large_batches_agree_with_single_configurations(batch, monkeypatch):
    monkeypatch.setattr(energy, "COMPILED_BATCH", 1)
    generator = np.random.default_rng(0)
    pairs = [[k, (k + 1) % 7] for k in range(7)]
    f = exchange(7, pairs, generator.standard_normal((7, 3, 3))) + field(7, [1, 2], [0.1, 0.2, 0.3]) + 2.5
    f += anisotropy(7, range(7), [1, 2, 0], 0.7)
    n = generator.standard_normal((batch, 7, 3))
    n /= np.linalg.norm(n, axis=-1, keepdims=True)
    values, gradients = f.value_and_gradient(n)
    assert values.shape == (batch,)
    for k in range(batch):
        value, gradient = f.value_and_gradient(n[k])
        assert values[k] == pytest.approx(value, rel=1e-13)
        assert np.allclose(gradients[k], gradient, rtol=0, atol=1e-13)
    views = np.moveaxis(np.ascontiguousarray(np.moveaxis(n, 0, 2)), 2, 0)
    assert np.array_equal(f.value_and_gradient(views)[0], values)
