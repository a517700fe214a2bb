"""Jobs: work that runs in a process of its own, in a folder of its own."""
