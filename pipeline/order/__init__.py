"""The best sequence and how good it is at most: exact for small sets, improved and bounded for large ones."""
