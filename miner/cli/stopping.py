"""Ends the program when it is told to (Ctrl-C, SIGTERM, a closed terminal): at once, and cleanly.

A kernel may run for seconds, during which the interpreter delivers no signal to the main thread.
So a thread waits for signals, removes what is unfinished, and ends the process.
"""

from __future__ import annotations

import os
import signal
import sys
import threading

from miner import placing

PATIENCE = 1.0  # seconds for a folder that is being moved
NAMES = ("SIGINT", "SIGTERM", "SIGHUP")
SHOW_CURSOR = "\r\x1b[2K\x1b[?25h"


def listen() -> None:
    """Begin to listen for signals; those that whoever started the program ignores stay ignored."""
    if sys.platform == "win32":
        return  # there Ctrl-C alone exists, and is raised as an exception
    heard, told = os.pipe()
    os.set_blocking(told, False)
    for name in NAMES:
        number = getattr(signal, name)
        if signal.getsignal(number) is not signal.SIG_IGN:
            signal.signal(number, _park)
    signal.set_wakeup_fd(told, warn_on_full_buffer=False)
    threading.Thread(target=_wait, args=(heard,), daemon=True, name="signals").start()


def _park(number: int, frame: object) -> None:
    """Stop the main thread where it is, unless it is just moving something to its place."""
    if not placing.is_placing():
        threading.Event().wait()


def _wait(heard: int) -> None:
    ours = {getattr(signal, name) for name in NAMES}
    number = 0
    while number not in ours:
        number = os.read(heard, 1)[0]
    try:
        placing.abandon(PATIENCE)
        line = f"stopped by {signal.Signals(number).name}; nothing unfinished is left\n"
        os.write(2, ((SHOW_CURSOR if os.isatty(2) else "") + line).encode())
    finally:  # whatever goes wrong: the main thread waits for this
        os._exit(128 + number)
