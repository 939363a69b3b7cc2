"""Runs the command line in forked processes, one after another, so that many can be killed in little time; run by the kill test.

Each line read is a number of seconds after which to kill with SIGKILL (or "-") and a command line; the answer is how it ended.
"""

from __future__ import annotations

import os
import signal
import sys
import time


def main() -> None:
    """Import everything once, then fork for each line."""
    import matplotlib.figure  # noqa: F401 - loaded once for all children
    from apscheduler.triggers import cron  # noqa: F401

    from watcher import cli, commands, cycle  # noqa: F401

    print("ready", flush=True)
    for line in sys.stdin:
        after, *words = line.split()
        child = os.fork()
        if child == 0:
            sys.stdout = open(os.devnull, "w", encoding="utf-8")  # noqa: SIM115, PTH123
            try:
                cli.main(words, prog_name="gapbell")
            except SystemExit as end:
                os._exit(int(end.code or 0))
            os._exit(70)
        if after != "-":
            time.sleep(float(after))
            os.kill(child, signal.SIGKILL)  # its number is ours until we have asked how it ended
        _, state = os.waitpid(child, 0)
        print(os.waitstatus_to_exitcode(state), flush=True)


if __name__ == "__main__":
    main()
