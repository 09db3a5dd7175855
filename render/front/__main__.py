"""``python -m sweepset``."""

import sys

from sweepset.render.commands import main

if __name__ == "__main__":
    sys.exit(main())
