"""Compiled kernels: arrays in, arrays out, no logging."""
