"""The command line: the only rooms that print, exit, or map errors to exit codes."""
