"""One module a command: options in, layers called, text and JSON out. No command computes anything itself."""
