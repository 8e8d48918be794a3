"""Panels: the selected operator, and below the drawing the findings, the verdict, the catalog, the revisions."""
