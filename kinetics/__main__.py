"""``python -m kinetics``."""

import sys

from kinetics.cli import main

if __name__ == "__main__":
    sys.exit(main())
