"""Runs the command line as ``python -m intplan``."""

from intplan.cli import main

if __name__ == "__main__":
    main()
