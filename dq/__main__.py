"""``python -m dq`` is the command ``dq``."""

import sys

from dq.cli.main import main

if __name__ == "__main__":
    sys.exit(main())
