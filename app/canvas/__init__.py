"""The canvas: one widget that paints the display list."""
