"""Demonstrations: what an episode is, how good it is, and how episodes are divided."""
