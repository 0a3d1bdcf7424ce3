"""The native dispatch: every task is a Dask task, placed and ordered by Dask's own scheduler."""

from breakstep.engine.native.driver import NativeDispatch

__all__ = ["NativeDispatch"]
