"""Command line: one module a command group, each a thin call of the same functions."""
