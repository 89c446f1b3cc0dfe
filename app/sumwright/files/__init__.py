"""Everything that is read from or written to a file; no arithmetic lives here."""
