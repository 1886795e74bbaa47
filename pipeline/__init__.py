"""Lattice Census: survey the lattices of a collection of crystal structures and count every crystal once."""

__version__ = "0.1.0"
