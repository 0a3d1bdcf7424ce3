"""Task graphs played on described machines: replay, bounds, and graphs too large to be stored.

Knows durations, edges and machines as numbers. Refuses to know what a profile's files look like inside
the engines (whoever lifts a profile into a :class:`~breakstep.forecast.graph.ReplayGraph` does), what
physics a task holds, and Dask.
"""
