"""Data sets for tests, made when first asked for and kept under `build/`."""
