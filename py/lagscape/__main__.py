"""`python -m lagscape`: see `lagscape.command_line`."""

import sys

from lagscape.command_line import main

if __name__ == "__main__":
    sys.exit(main())
