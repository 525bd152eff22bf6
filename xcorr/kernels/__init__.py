"""Plain arrays in and out: compiled kernels, each with a slow twin that tests compare it with.

`voigt` is exported as a function: import its module's other names with ``from xcorr.kernels.voigt import``.
"""

from xcorr.kernels.voigt import voigt

__all__ = ["voigt"]
