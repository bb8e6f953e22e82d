"""Kernels from Python: a first whole job."""

from __future__ import annotations

import numpy as np

from demilune import kernel


def test_packed_product():
    product = kernel("product", layout="packed", n=3, dtype="float64", language="python")
    half = product.to_half([[4.0, 1.0, 0.0], [1.0, 3.0, 2.0], [0.0, 2.0, 5.0]])
    assert np.array_equal(product(half, np.ones(3)), [5.0, 6.0, 7.0])
    assert product.verify().verified
