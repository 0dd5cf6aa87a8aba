"""``python -m scatterfit``, the same as the ``scatterfit`` command."""

import sys

from scatterfit.cli import main

if __name__ == "__main__":
    sys.exit(main())
