"""The command line: one file per command; each parses, makes one call, prints and chooses the exit code."""
