"""Numbers only: curves, fits, distances. No files, no drawing format, no printing."""
