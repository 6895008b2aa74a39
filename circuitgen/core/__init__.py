"""Errors, keyed draws, table declarations, whole files, progress."""
