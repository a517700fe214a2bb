"""The keeper: the one process that owns the store; it takes demonstrations in, answers operators and runs jobs."""
