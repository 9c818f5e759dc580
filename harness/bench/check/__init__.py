"""Checking before a run: the path, the instruments, time and disk, before the device is blamed."""
