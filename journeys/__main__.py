"""`python -m journeys` is the same as the command `journeys`."""

import sys

from journeys.command.main import main

if __name__ == "__main__":
    sys.exit(main())
