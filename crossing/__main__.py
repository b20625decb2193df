"""``python -m crossing``: the same as the ``crossing`` command."""

from __future__ import annotations

import sys

from crossing.cli.main import main

if __name__ == "__main__":
    sys.exit(main())
