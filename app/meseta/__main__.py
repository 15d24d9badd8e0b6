"""The command ``meseta``, also ``python -m meseta``: an interruption is answered even while libraries load."""

import sys

__all__ = ["main"]


def main() -> None:
    """Run the command line and leave with its exit code."""
    try:
        from meseta.command import main as command_line

        command_line()
    except KeyboardInterrupt:
        sys.stderr.write("meseta: stopped on request; nothing was changed\n")
        sys.exit(130)


if __name__ == "__main__":
    main()
