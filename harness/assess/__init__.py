"""Assessment: the only source of the numbers and sentences that are derived from a record."""
