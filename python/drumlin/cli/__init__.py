"""The command line: the verbs of the package, with the same words and defaults."""
