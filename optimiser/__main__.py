"""Run the command line as ``python -m optimiser``."""

from __future__ import annotations

import sys

from optimiser.cli import main

if __name__ == "__main__":
    sys.exit(main())
