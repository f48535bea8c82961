"""Sampling the posterior of many stars at once: kernels, moves, convergence and summaries."""
