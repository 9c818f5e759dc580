"""Exports: a record's numbers for other programs, as CSV, JSON and JUnit XML."""
