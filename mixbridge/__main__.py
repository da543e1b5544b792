"""``python -m mixbridge`` is the command line."""

import sys

from mixbridge.cli import main

if __name__ == "__main__":
    sys.exit(main())
