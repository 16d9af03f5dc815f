"""One file a command; each has `add_arguments` and `run`."""
