"""`python -m maxent` is the command `multipliers`."""

import sys

from maxent.app.cli import main

if __name__ == "__main__":
    sys.exit(main())
