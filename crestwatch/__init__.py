"""The command: arguments, exit codes, and the one place where rooms are joined."""
