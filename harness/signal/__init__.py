"""Bits, registers, patterns, alignment, counting: numpy only, no I/O, no clock."""
