"""``python -m portfire`` is the ``portfire`` command."""

import sys

from portfire.cli import main

if __name__ == "__main__":
    sys.exit(main())
