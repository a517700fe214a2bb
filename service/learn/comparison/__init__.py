"""Other imitation methods, with the same networks and budget, for the learning benchmark alone."""
