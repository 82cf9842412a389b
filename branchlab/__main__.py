"""`python -m branchlab` is the command `branchlab`."""

import sys

from branchlab.cli import main

if __name__ == "__main__":
    sys.exit(main())
