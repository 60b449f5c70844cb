"""The command line: parses, calls one function, prints, chooses the exit code."""


def main() -> None:
    """Entry point of `shedwright`."""
    raise SystemExit("not ready")
