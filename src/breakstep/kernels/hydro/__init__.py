"""Hydrodynamics of one tile: directional sweeps (`sweep`), and the plain NumPy form they must equal to the bit."""
