"""Examination of a table that is never in memory as a whole."""
