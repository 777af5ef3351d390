"""The program: ``idlerwatch`` or ``python -m idlerwatch``."""

from idlerwatch.cli.program import program


def main() -> None:
    """Run the command that the words of the command line name."""
    program()


if __name__ == "__main__":
    main()
