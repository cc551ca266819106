# SPDX-License-Identifier: MIT
"""`python -m scanstrain` is the same as `scanstrain`."""

import sys

from scanstrain.cli import main

if __name__ == "__main__":
    sys.exit(main())
