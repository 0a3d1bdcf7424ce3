"""Breakstep: operator-split physics run in lockstep and as tasks, with an account of every core-second."""
