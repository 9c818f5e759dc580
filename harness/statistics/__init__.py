"""What counts prove: bounds, plans, clustering, availability, theory and curves; no input or output."""
