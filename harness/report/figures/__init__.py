"""Figures: what is drawn, as data; and how, with matplotlib, which is imported only when something is drawn."""
