"""Reporting: models explained in words and tables."""
