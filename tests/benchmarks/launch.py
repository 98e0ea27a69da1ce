"""Runs one command as a process and writes what it used: ``launch.py RESULT LOG SECONDS COMMAND``.

Standard library only. On Linux a process starts with the peak memory of the one it was started
from, so that whoever makes worlds in memory cannot start what is measured; this small one can.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
import threading
import time
from pathlib import Path


def main(result: str, log: str, seconds: str, *command: str) -> None:
    """Wait for the command, end it after ``seconds``, write wall and CPU seconds and peak bytes."""
    with open(log, "wb") as out:
        start = time.perf_counter()
        process = subprocess.Popen(command, stdout=out, stderr=subprocess.STDOUT)
        too_long = threading.Event()

        def stop() -> None:
            too_long.set()
            process.kill()

        timer = threading.Timer(float(seconds), stop)
        timer.daemon = True
        timer.start()
        _, status, used = os.wait4(process.pid, 0)
        wall = time.perf_counter() - start
        process.returncode = os.waitstatus_to_exitcode(status)  # a late stop() then does nothing
        timer.cancel()
    unit = 1 if sys.platform == "darwin" else 1024
    Path(result).write_text(
        json.dumps(
            {
                "wall": wall,
                "cpu": used.ru_utime + used.ru_stime,
                "peak": used.ru_maxrss * unit,
                "status": process.returncode,
                "is_cut": too_long.is_set(),
            }
        )
    )


if __name__ == "__main__":
    main(*sys.argv[1:])
