"""Drops: water's refractive index, drop sizes and fall speeds, and the angles of the bows by ray optics."""
