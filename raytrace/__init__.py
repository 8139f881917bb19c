"""Monte Carlo ray tracing of rainbows: a scene file becomes a calibrated picture of the sky."""
