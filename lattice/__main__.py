"""`python -m lattice`: the same as the command `lattice`."""

from __future__ import annotations

import sys

from lattice.cli.main import main

if __name__ == "__main__":
    sys.exit(main())
