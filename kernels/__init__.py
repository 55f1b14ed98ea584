"""Numba kernels: arrays in, arrays out. No options, no files, no knowledge of what calls them."""
