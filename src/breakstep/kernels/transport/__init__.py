"""Implicit multi-group radiation transport on one tile: assemble, relax, exchange (`solve`)."""
