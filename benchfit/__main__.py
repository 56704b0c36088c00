"""``python -m benchfit``."""

import sys

from benchfit.commands.main import main

# The guard is for Windows and macOS, where worker processes import this module anew.
if __name__ == "__main__":
    sys.exit(main())
