"""Benchmarks: each times our part and the reference on the same structures in one run, and checks the answer."""
