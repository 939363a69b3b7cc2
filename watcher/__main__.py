"""``python -m watcher`` is ``gapbell``."""

from __future__ import annotations

from watcher.cli import main

if __name__ == "__main__":
    main()
