"""``python -m tilemap``: the same as the command."""

import sys

from tilemap.cli import main

if __name__ == "__main__":
    sys.exit(main())
