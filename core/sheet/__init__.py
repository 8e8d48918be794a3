"""The document: formulations, revisions, callouts, catalog; its history and its file."""

ENDING = ".planimeter"
"""How the names of sheet files end."""
