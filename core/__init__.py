"""Planimeter's core: queries as relational algebra, independent of any screen."""
