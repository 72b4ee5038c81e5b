"""The command line: ``python -m schemesim``; see :mod:`schemesim.cli`."""

import sys

from schemesim.cli import main

if __name__ == "__main__":
    sys.exit(main())
