"""Prints and exit codes; nothing else prints."""


def main() -> None:
    """Run the command line."""
