"""The bench: where drivers, signal, plans and store meet, and a run is carried out."""
