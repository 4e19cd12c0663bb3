"""A mixture in the words of others: expressions, queries, plain code, JSON. Nothing here reads rows."""
