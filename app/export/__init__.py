"""The display list painted by Qt and written to files."""
