"""Makes ``python -m perdure`` the same as the command ``perdure``."""

from __future__ import annotations

import sys

from perdure._cli.main import main

if __name__ == "__main__":
    sys.exit(main())
