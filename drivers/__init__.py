"""Links and instruments: bytes, ports and settings. Imports nothing of harness."""
