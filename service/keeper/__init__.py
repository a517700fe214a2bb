"""The keeper: intake, desk, jobs, releases; the process that owns the store."""
