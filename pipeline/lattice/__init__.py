"""Mathematics of lattices in plain NumPy: no atoms, no compiled code."""
