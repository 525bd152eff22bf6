"""The numba entry falls back where nothing can be cached."""

import numpy as np

from xcorr.kernels.jit import jit


def test_a_kernel_without_a_place_to_cache_still_compiles():
    # code that belongs to no file has "no locator available", as a read-only package with a read-only home
    names = {"jit": jit}
    exec(compile("@jit\ndef twice(x):\n    return 2.0 * x\n", "<nowhere>", "exec"), names)
    assert names["twice"](21.0) == 42.0


def test_options_pass_through():
    @jit(cache=False, fastmath={"reassoc"})
    def total(values):
        out = 0.0
        for value in values:
            out += value
        return out

    assert total(np.arange(5.0)) == 10.0
    assert np.isnan(total(np.array([1.0, np.nan])))
