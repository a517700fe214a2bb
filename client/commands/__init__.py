"""The command line's verbs, one module each, imported only when asked for."""
