"""Positions, and the display list that window, SVG, PDF and tests share."""
