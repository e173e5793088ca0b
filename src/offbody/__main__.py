"""The command line by ``python -m offbody``."""

import sys

from offbody.command import main

if __name__ == "__main__":
    sys.exit(main())
