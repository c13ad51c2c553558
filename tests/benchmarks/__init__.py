"""Benchmarks: slow comparisons of the product against references, run by hand."""
