"""Run the command line with ``python -m entropest``."""

import sys

from entropest.cli import main

if __name__ == "__main__":
    sys.exit(main())
