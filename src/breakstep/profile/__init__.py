"""The recorded run: what is kept on disk, how it is read back, and the accounts made from it.

Everything downstream of a run (accounts, forecasts, reports) sees a run through this layer alone. It
knows tasks, threads, times and bytes; it knows nothing of physics, of steps beyond their names, or of Dask.
"""
