"""Measuring a machine: memory, Parquet, the kernels and whole curves, in one or two minutes."""
