"""Run the command line with ``python -m gapfit``."""

from gapfit.cli import main

if __name__ == "__main__":
    main()
