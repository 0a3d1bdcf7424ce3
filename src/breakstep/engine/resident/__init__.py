"""The resident dispatch: each Dask worker holds its share of the graph and runs it by itself.

Dask starts the workers, connects them, encrypts and moves the bytes; it never sees a single task.
"""

from breakstep.engine.resident.driver import ResidentDispatch

__all__ = ["ResidentDispatch"]
