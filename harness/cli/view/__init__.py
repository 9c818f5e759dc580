"""The terminal view: a run as a page of a lab notebook. Only its rooms that draw import rich."""
