"""Nuclear burning of one tile's zones (`zones`), on networks of reactions (`network`)."""
