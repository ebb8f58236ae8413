"""`python -m hyperforecast.cli`."""

import sys

from hyperforecast.cli import main

if __name__ == "__main__":
    sys.exit(main())
