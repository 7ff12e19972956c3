"""The numerics: numpy and scipy, nothing of the web.

Errors raised here are those of :mod:`assignable.spc.errors`; results are frozen dataclasses of
arrays and plain values. ``import scipy`` is all a module writes: scipy loads its own submodules
(``scipy.special`` ...) at their first use, which keeps the start of the service short.
"""
