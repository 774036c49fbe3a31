"""``python -m poroscan``."""

import sys

from poroscan.cli.app import main

if __name__ == "__main__":
    sys.exit(main())
