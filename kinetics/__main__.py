"""``python -m kinetics``."""

import os
import sys

# Small matrices gain nothing from threads, and on a busy machine the threads' waiting for each
# other made a spectrum cost six times as much. Must stand before numpy is imported.
for _library in ("OPENBLAS", "OMP", "MKL"):
    os.environ.setdefault(f"{_library}_NUM_THREADS", "1")

from kinetics.cli import main  # noqa: E402

if __name__ == "__main__":
    sys.exit(main())
