"""Fitted bridges: density, drift, paths and coupling in closed form from the potentials."""
