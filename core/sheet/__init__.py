"""The document: formulations, revisions, callouts, catalog; its history and its file."""
