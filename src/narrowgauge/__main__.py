"""`python -m narrowgauge`."""

import sys

from narrowgauge.cli import main

if __name__ == "__main__":
    sys.exit(main())
