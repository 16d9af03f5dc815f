"""The command line: picks a command, imports it only then, and turns errors into exit codes."""


def main() -> int:
    """Run the command that the arguments name."""
    return 0
