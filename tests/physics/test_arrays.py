"""Types of arrays: a float32 batch stays one, everything else is float64."""

from __future__ import annotations

import numpy as np

from qa.physics.arrays import chosen, floats


def test_constants_do_not_widen_a_float32_batch() -> None:
    batch, constant = floats(np.zeros(3, dtype=np.float32), 1.5)
    assert batch.dtype == constant.dtype == np.float32


def test_any_float64_array_makes_all_float64() -> None:
    first, second = floats(np.zeros(3, dtype=np.float32), np.zeros(3))
    assert first.dtype == second.dtype == np.float64


def test_integers_become_float64() -> None:
    (whole,) = floats(np.arange(3))
    assert whole.dtype == np.float64
    assert floats(np.arange(3, dtype=np.int32), np.zeros(3, np.float32))[1].dtype == np.float64


def test_chosen_gives_a_scalar_for_scalars() -> None:
    assert np.ndim(chosen(np.bool_(False), 1.0, np.float64(2.0))) == 0
    assert chosen(np.bool_(False), 1.0, np.float64(2.0)) == 2.0
