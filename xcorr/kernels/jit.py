"""The one place where numba is entered: every kernel is decorated with `jit`."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numba


def jit(function: Callable[..., Any] | None = None, /, **options: Any) -> Any:
    """Compile a kernel: GIL released, result cached on disk where a place is writable.

    ``numba.njit(cache=True)`` raises "no locator available" at import when neither the package
    folder nor the home is writable; the kernel is then compiled afresh in every process.
    ``fastmath`` stays off: it breaks the skipping of NaN.

    Parameters
    ----------
    function : callable, optional
        The kernel; without it a decorator is returned, so both ``@jit`` and ``@jit(inline=...)`` work.
    **options
        Passed on to `numba.njit`, over the defaults ``nogil=True, cache=True``.

    Returns
    -------
    callable
        The compiled dispatcher, or the decorator.
    """
    settings = {"nogil": True, "cache": True} | options

    def compiled(kernel: Callable[..., Any]) -> Any:
        try:
            return numba.njit(**settings)(kernel)
        except RuntimeError as error:
            if "no locator available" not in str(error):
                raise
            return numba.njit(**(settings | {"cache": False}))(kernel)

    return compiled if function is None else compiled(function)
