"""One module a view: recorded profiles in, plain numbers out. Nothing here knows how they are drawn."""
