"""The policy as a file and as a function, in NumPy: what is served, measured and rolled back is one and the same."""
