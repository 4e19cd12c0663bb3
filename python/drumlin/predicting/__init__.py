"""Predicting: every row gets its component, how sure that is and how unusual the row is, as a stream or in files."""
