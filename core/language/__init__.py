"""Texts in and out: SQL in every dialect of sqlglot, and what is wrong with a text."""
