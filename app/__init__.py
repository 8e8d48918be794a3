"""Qt and the command line: thin; no rule of the algebra lives here."""
