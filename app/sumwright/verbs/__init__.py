"""The verbs of the command line: a module each, with `arguments(parser)` and `run(args) -> int`."""
