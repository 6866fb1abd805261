"""The body of each command, one module a command; ``run(args)`` returns the exit code."""
