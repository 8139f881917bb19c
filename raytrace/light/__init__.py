"""Sunlight: where the sun stands, its spectrum at the drops, and its disc."""
