"""Kernels: arrays and a generator in, arrays out; no design, no table."""
