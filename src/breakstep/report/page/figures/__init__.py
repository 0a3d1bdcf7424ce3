"""Bokeh figures made from the page's numbers alone; colours are those of the light page, replaced on a dark one."""
