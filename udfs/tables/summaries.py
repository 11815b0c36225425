"""Kernels behind the table functions: many figures of one group in a single pass."""

SUMMARIES: tuple = ()
