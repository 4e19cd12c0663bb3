"""Judging: what is in the columns, and later how many groups the data support and what has changed."""
