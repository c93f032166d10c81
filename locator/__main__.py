"""``python -m locator``: the same as the command ``locator``."""

import sys

from locator.cli import main

if __name__ == "__main__":
    sys.exit(main())
