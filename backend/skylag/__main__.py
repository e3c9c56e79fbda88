"""Where the program begins: Ctrl-C is answered in words also while everything else is still being loaded."""

import sys


def main() -> int:
    """Run one command with the arguments of the process; returns the exit status."""
    try:
        from skylag.cli import main as run  # takes a second or so

        return run()
    except KeyboardInterrupt:
        print("skylag: stopped; nothing unfinished was kept", file=sys.stderr)
        return 130


if __name__ == "__main__":
    sys.exit(main())
