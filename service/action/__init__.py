"""The action server: serves actions, never waits for anything else."""
