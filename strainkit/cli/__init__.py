"""The command line: one module a command; everything heavy is imported inside the command bodies."""
