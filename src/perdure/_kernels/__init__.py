"""Compiled loops: the generated burst kernel of a case, and the static kernels around it.

A kernel takes arrays and numbers, fills arrays given to it and trusts its arguments. numba lives here only.
"""
