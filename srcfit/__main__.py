"""`python -m srcfit` runs the command line."""

import sys

from srcfit.cli import main

if __name__ == "__main__":
    sys.exit(main())
