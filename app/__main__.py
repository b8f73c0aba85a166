"""Entry point of the `softmode` command; light, because every computing process reads it again."""

import sys


def main() -> None:
    """Run the command line and leave with its exit status."""
    from app.cli import run  # noqa: PLC0415 - computing processes import this module and need none of it

    sys.exit(run(sys.argv[1:]))


if __name__ == "__main__":
    main()
