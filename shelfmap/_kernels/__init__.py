"""Compiled loops: arrays in, results filled into arrays given; no checks, no files, no settings.

No fastmath, not even contraction: a loop stands in numba's memory and cache as several copies, which LLVM may fuse
differently; a first run, later runs and worker processes would differ in the last bit.
"""
