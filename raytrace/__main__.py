"""`python -m raytrace`, and the command `raytrace`."""

import sys


def main() -> int:
    """Run the command line; see `raytrace.cli.run`."""
    from raytrace.cli import run

    return run(sys.argv[1:])


if __name__ == "__main__":
    sys.exit(main())
