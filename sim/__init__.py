"""Simulated rigs, experts and operators. NumPy and SciPy; Gymnasium optional."""
