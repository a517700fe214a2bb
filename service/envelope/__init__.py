"""The chain of checks between a policy's output and the machine. NumPy only."""
