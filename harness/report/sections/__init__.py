"""The sections of a report: each function makes one of them from the material, or none."""
