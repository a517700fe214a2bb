"""Learning: cloning and proximal-point imitation. The only package that imports torch."""
