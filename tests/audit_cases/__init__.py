"""Steps with false declarations and steps with true ones, in Python, Numba and C. All arithmetic is invented."""
