"""Instrument drivers: what sets or reads a condition such as attenuation, level or temperature."""
