"""`python -m decode` is the command `shaftproof`."""

import sys

from decode.cli import main

if __name__ == "__main__":
    sys.exit(main())
