"""`python -m raytrace`, and the command `raytrace`."""

import sys


def main() -> int:
    """Run the command line; see `raytrace.cli.run`."""
    try:
        # names of files may have characters that the output's encoding lacks
        for stream in (sys.stdout, sys.stderr):
            if stream is not None:
                stream.reconfigure(errors="backslashreplace")
        from raytrace.cli import run

        return run(sys.argv[1:])
    except KeyboardInterrupt:
        # before the command began
        return 130


if __name__ == "__main__":
    sys.exit(main())
