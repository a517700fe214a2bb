"""Distances to the expert, with intervals; the gate."""
