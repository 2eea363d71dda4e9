"""`python -m fragkit` is the command `fragkit`."""

import sys

from fragkit.cli import main

if __name__ == "__main__":
    sys.exit(main())
