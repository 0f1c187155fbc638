"""Lines → grid: harmonic gridding of all components together, and maps derived from it."""
